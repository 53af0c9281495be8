"""What pressing a rigid body on a part found: force, pressure, contact area, stiffness."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from voxelmat.model.indenter import Indenter
from voxelmat.model.loadcase import LoadCase
from voxelmat.model.part import Part
from voxelmat.model.result import Extreme
from voxelmat.provenance import Provenance

__all__ = ["ContactResult", "PressCurve"]

Vector = tuple[float, float, float]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ContactResult:
    """One position of the indenter.

    Arrays of length m list the nodes of the part's surface that the indenter could touch.

    Attributes
    ----------
    part : Part
    load_case : LoadCase
        Supports, and what else acts.
    indenter : Indenter
    depth : float
        Travel of the indenter after first touch, mm.
    touch : float
        Travel from the indenter's position to first touch, mm.
    force : float
        On the part, along the push, N.
    tangent : float
        Slope of force over depth with the present nodes in contact, N/mm.
    node : ndarray of intp, shape (m, 3)
        Node indices i, j, k.
    nodal_force : ndarray of float64, shape (m,)
        Along the push, N, not negative.
    gap : ndarray of float64, shape (m,)
        What is left between the surface and the indenter, mm, not negative; inf beside it.
    area : ndarray of float64, shape (m,)
        Area of the surface that belongs to the node as the indenter sees it (projected along the
        push), mm^2.
    true_area : ndarray of float64, shape (m,)
        The same on the sloping surface, mm^2.
    pressure : ndarray of float64, shape (m,)
        Nodal force over `area`, MPa: noisy from node to node, above all at the rim.
    peak_pressure : Extreme
        Largest mean over the nodes of the faces round one node, MPa, and that node's place: force
        over area, so that one node's noise does not count.
    displacement : ndarray of float64, shape (nx+1, ny+1, nz+1, 3)
        mm.
    reactions : mapping
        Support to force on the part, N.
    applied : tuple of float
        Sum of the other loads, N.
    balance : float
        Size of the sum of all forces over the largest of them.
    changes : tuple of int
        Nodes that came into or out of contact in each round; the last is 0.
    iterations : int
        Of the linear solver, all rounds together.
    residual : float
        Of the last linear solve, relative to its load.
    element : str
    cautions : tuple of str
    provenance : Provenance
    """

    part: Part
    load_case: LoadCase
    indenter: Indenter
    depth: float
    touch: float
    force: float
    tangent: float
    node: NDArray[np.intp]
    nodal_force: NDArray[np.float64]
    gap: NDArray[np.float64]
    area: NDArray[np.float64]
    true_area: NDArray[np.float64]
    pressure: NDArray[np.float64]
    peak_pressure: Extreme
    displacement: NDArray[np.float64]
    reactions: Mapping[str, Vector]
    applied: Vector
    balance: float
    changes: tuple[int, ...]
    iterations: int
    residual: float
    element: str = "icmb"
    cautions: tuple[str, ...] = ()
    provenance: Provenance = field(default_factory=Provenance)

    @property
    def touching(self) -> NDArray[np.bool_]:
        """Which of the nodes carry force."""
        return self.nodal_force > 0

    @property
    def contact_area(self) -> float:
        """True area of the surface of the nodes that carry force, mm^2.

        A node counts with all of its area, so the rim is good to about half a voxel.
        """
        return float(self.true_area[self.touching].sum())

    @property
    def secant(self) -> float:
        """Force over depth, N/mm; nan at depth 0."""
        return self.force / self.depth if self.depth > 0 else float("nan")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PressCurve:
    """Force against depth: press here and read N/mm.

    Attributes
    ----------
    depth : ndarray of float64, shape (n,)
        After first touch, mm, rising.
    force : ndarray of float64, shape (n,)
        N.
    tangent : ndarray of float64, shape (n,)
        N/mm.
    contact_area : ndarray of float64, shape (n,)
        mm^2.
    peak_pressure : ndarray of float64, shape (n,)
        MPa.
    last : ContactResult
        At the largest depth.
    """

    depth: NDArray[np.float64]
    force: NDArray[np.float64]
    tangent: NDArray[np.float64]
    contact_area: NDArray[np.float64]
    peak_pressure: NDArray[np.float64]
    last: ContactResult

    @property
    def secant(self) -> NDArray[np.float64]:
        """Force over depth, N/mm."""
        return self.force / self.depth

"""Natural frequencies and mode shapes of a part, and how much mass moves in each."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.loadcase import Foundation, GroundSpring, Support
from voxelmat.model.part import Part
from voxelmat.model.region import Region
from voxelmat.provenance import Provenance

__all__ = ["ModalResult"]

Double = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ModalResult:
    """The lowest modes above those of rigid motion.

    Attributes
    ----------
    part : Part
    supports : tuple of Support
    springs : tuple of GroundSpring or Foundation
    frequencies : ndarray of float64, shape (n,)
        Hz, ascending.
    shapes : ndarray of float64, shape (n, nx+1, ny+1, nz+1, 3)
        At the nodes, scaled so that a mode's mass, shape . M shape, is 1 tonne; 0 where no
        material touches.
    residuals : ndarray of float64, shape (n,)
        Of each pair, relative to its elastic force, in the norm of energy; the relative error
        that is left in a frequency is about half its square over the relative gap to the next.
    participation : ndarray of float64, shape (n, 3)
        shape . M e along x, y, z, sqrt(tonne).
    mass : float
        Mass that takes part in the solve, tonne.
    rigid : tuple of str
        Rigid motions that nothing holds: modes of 0 Hz, taken out exactly.
    rigid_shapes : ndarray of float64, shape (r, nx+1, ny+1, nz+1, 3)
        Their shapes, scaled like the others.
    mass_model, element : str
    iterations : int
    cautions : tuple of str
    provenance : Provenance
    """

    part: Part
    supports: tuple[Support, ...]
    springs: tuple[GroundSpring | Foundation, ...]
    frequencies: Double
    shapes: Double
    residuals: Double
    participation: Double
    mass: float
    rigid: tuple[str, ...]
    rigid_shapes: Double
    mass_model: str
    element: str
    iterations: int
    cautions: tuple[str, ...] = ()
    provenance: Provenance = field(default_factory=Provenance)

    def __len__(self) -> int:
        return len(self.frequencies)

    @property
    def angular(self) -> Double:
        """Angular frequencies, rad/s."""
        return np.asarray(2.0 * np.pi * self.frequencies)

    @property
    def effective_mass(self) -> Double:
        """Mass that moves along x, y, z in each mode, tonne, shape (n, 3)."""
        return np.asarray(self.participation**2)

    @property
    def effective_share(self) -> Double:
        """`effective_mass` over the mass of the part, shape (n, 3)."""
        return np.asarray(self.effective_mass / self.mass)

    def mean_over(self, region: Region) -> Double:
        """Mean of each shape over the nodes of a region, shape (n, 3).

        Raises
        ------
        InputError
            Where the region holds no node of the part.
        """
        return self._mean(self.shapes, region)

    def rigid_mean_over(self, region: Region) -> Double:
        """The same of the rigid motions, shape (r, 3)."""
        return self._mean(self.rigid_shapes, region)

    def _mean(self, shapes: Double, region: Region) -> Double:
        nodes = region.nodes(self.part)
        if not nodes.any():
            raise InputError(f"Region '{region.name}' holds no node of the part.")
        return np.asarray(shapes[:, nodes].mean(axis=1))

    def __repr__(self) -> str:
        listed = ", ".join(f"{f:.4g}" for f in self.frequencies)
        return f"ModalResult({self.part.name!r}, {listed} Hz, {len(self.rigid)} rigid motions)"

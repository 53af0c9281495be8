"""Load factors at which a part buckles, and the shapes in which it does."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from voxelmat.model.result import StaticResult
from voxelmat.provenance import Provenance

__all__ = ["BucklingResult"]

Double = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class BucklingResult:
    """Linear buckling of one load case.

    Attributes
    ----------
    static : StaticResult
        The load case at factor 1.
    factors : ndarray of float64, shape (n,)
        Ascending, all above 0: the load case times such a factor has a second equilibrium. Empty
        where no multiple of the load buckles the part.
    shapes : ndarray of float64, shape (n, nx+1, ny+1, nz+1, 3)
        At the nodes, largest displacement 1 mm; only the shape has a meaning, not its size.
    residuals : ndarray of float64, shape (n,)
        Of each pair in the norm of energy; the relative error left in a factor is about its square
        over the relative gap to the next.
    reversed_factor : float or None
        Smallest factor below 0 in size: the load the other way round buckles the part at this
        multiple. None where there is none within 100 times the lowest of `factors`.
    iterations : int
    cautions : tuple of str
    provenance : Provenance
    """

    static: StaticResult
    factors: Double
    shapes: Double
    residuals: Double
    reversed_factor: float | None
    iterations: int
    cautions: tuple[str, ...] = ()
    provenance: Provenance = field(default_factory=Provenance)

    @property
    def critical(self) -> float | None:
        """The lowest factor, None where no multiple of the load buckles the part."""
        return float(self.factors[0]) if len(self.factors) else None

    def __repr__(self) -> str:
        listed = ", ".join(f"{f:.4g}" for f in self.factors) or "none"
        return f"BucklingResult({self.static.load_case.name!r}, load factors {listed})"

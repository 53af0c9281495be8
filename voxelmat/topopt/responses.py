"""What is minimised or limited: a value and its derivatives by the physical fields.

A response never sees filters or unknowns, so any response works with any kind of unknown.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from voxelmat.topopt.physics import Physics

__all__ = ["Amount", "ComplianceResponse", "Response", "TargetResponse", "told"]

Array = NDArray[np.float64]
Slopes = dict[str, Array]


class Response(Protocol):
    """A number that depends on a design."""

    @property
    def name(self) -> str:
        """In words."""

    @property
    def unit(self) -> str:
        """Of the value that `report` gives."""

    def value(self, physics: Physics) -> tuple[float, Slopes]:
        """The value, and its derivatives by ``lam``, ``mu``, ``rho`` and ``w`` (where not 0)."""

    def report(self, value: float) -> float:
        """The value as it is told to people."""


def told(response: Response, physics: Physics, value: float) -> float:
    """What people are told: the true value where a smooth one stands for it, which has `truth`."""
    truth: Callable[[Physics], float] | None = getattr(response, "truth", None)
    return response.report(value) if truth is None else truth(physics)


@dataclass(frozen=True, slots=True, kw_only=True)
class ComplianceResponse:
    """sum over load cases of weight times force times displacement, N mm; all, or those named."""

    of: tuple[int, ...] | None = None
    name: str = "compliance"
    unit: str = "N mm"

    def value(self, physics: Physics) -> tuple[float, Slopes]:
        """d(f u) = -u^T dK u, since the load does not depend on the design."""
        total = 0.0
        slopes: Slopes = {}
        for n, case in enumerate(physics.cases):
            if self.of is not None and n not in self.of:
                continue
            u = physics.displacement(n)
            total += case.weight * float(np.vdot(case.force, u))
            for key, form in physics.by_stiffness(u, u).items():
                slopes[key] = slopes.get(key, 0.0) - case.weight * form
        return total, slopes

    def report(self, value: float) -> float:
        """As it is."""
        return value


@dataclass(frozen=True, slots=True, kw_only=True)
class TargetResponse:
    """sum (u - u*)^2 / sum u*^2 over some nodes, u along one direction.

    Attributes
    ----------
    case : int
        Number of the load case.
    nodes : ndarray of bool, (nz+1, ny+1, nx+1)
    target : ndarray of float, the same shape
        u*, mm; 0 outside `nodes`.
    direction : tuple of float
        Unit vector, x, y, z.
    key : str
        A name of its own for what the solver keeps.
    """

    case: int
    nodes: NDArray[np.bool_]
    target: Array
    direction: tuple[float, float, float]
    key: str = "target"
    name: str = "relative error of the deflection"
    unit: str = ""

    def value(self, physics: Physics) -> tuple[float, Slopes]:
        """K a = dJ/du; dJ = -a^T dK u."""
        u = physics.displacement(self.case)
        along = sum(d * u[c] for c, d in enumerate(self.direction))
        miss = np.where(self.nodes, along - self.target, 0.0)
        size = float((self.target**2).sum())
        slope = np.stack([2.0 / size * d * miss for d in self.direction])
        adjoint = physics.adjoint(self.case, slope, self.key)
        forms = physics.by_stiffness(u, adjoint)
        return float((miss**2).sum()) / size, {key: -form for key, form in forms.items()}

    def report(self, value: float) -> float:
        """Root of the mean square error over that of the target."""
        return float(np.sqrt(max(value, 0.0)))


@dataclass(frozen=True, slots=True, kw_only=True)
class Amount:
    """sum over voxels of weight * rho * sum_m factor_m w_m: a volume, a mass, or a resin's share.

    Attributes
    ----------
    name, unit : str
    weight : ndarray, (nz, ny, nx)
        For instance the solid volume that the shape allows each voxel, mm^3.
    factor : ndarray, (K,)
        1 for volume, densities for mass, 1 for one resin and 0 for the others.
    always : float
        What is there whatever the design.
    """

    name: str
    unit: str
    weight: Array
    factor: Array
    always: float = 0.0

    def value(self, physics: Physics) -> tuple[float, Slopes]:
        """Needs no solve."""
        f = physics.fields
        mixed = np.tensordot(self.factor, f.w, 1)
        by_rho = self.weight * mixed
        by_w = np.multiply.outer(self.factor, self.weight * f.rho)
        return float((by_rho * f.rho).sum()) + self.always, {"rho": by_rho, "w": by_w}

    def report(self, value: float) -> float:
        """As it is."""
        return value

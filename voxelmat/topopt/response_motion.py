"""Responses made of displacements: worst case, mean and largest motion, worst error of a target."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.topopt.physics import Physics
from voxelmat.topopt.responses import Slopes, TargetResponse
from voxelmat.topopt.smooth import correction, scaled, smooth_maximum

__all__ = [
    "LargestMotionResponse",
    "MeanMotionResponse",
    "TargetErrorResponse",
    "WorstComplianceResponse",
]

Array = NDArray[np.float64]
Bools = NDArray[np.bool_]
Vector = tuple[float, float, float]


def along(u: Array, direction: Vector) -> Array:
    """Component of a vector field along a direction."""
    return np.asarray(sum(d * u[c] for c, d in enumerate(direction)))


def by_motion(
    physics: Physics, case: int, slope: Array, direction: Vector, key: str
) -> dict[str, Array]:
    """Slopes by moduli of a number with this slope by the motion along a direction."""
    load = np.stack([d * slope for d in direction])
    adjoint = physics.adjoint(case, load, key)
    forms = physics.by_stiffness(physics.displacement(case), adjoint)
    return {name: -form for name, form in forms.items()}


def add(total: Slopes, more: Mapping[str, Array]) -> None:
    """Add slopes in place of the mapping, not of its arrays."""
    for name, slope in more.items():
        total[name] = total[name] + slope if name in total else slope


@dataclass(frozen=True, slots=True, kw_only=True)
class WorstComplianceResponse:
    """Greatest weighted compliance over load cases, N mm, by a smooth maximum.

    Why not a bound as one more unknown: the compliances of all cases are solved for anyway, no
    case needs an adjoint, and every optimiser works with it, those without constraints too. What
    it costs is bounded: the design's worst case lies at most n^(1/P) above the best there is.
    """

    cases: tuple[int, ...]
    exponent: float
    key: str
    name: str = "greatest compliance"
    unit: str = "N mm"

    def _values(self, physics: Physics) -> Array:
        pairs = ((physics.cases[n], physics.displacement(n)) for n in self.cases)
        return np.array([c.weight * float(np.vdot(c.force, u)) for c, u in pairs])

    def value(self, physics: Physics) -> tuple[float, Slopes]:
        """d(f u) = -u^T dK u for each case."""
        values = self._values(physics)
        worst, slope = smooth_maximum(values, self.exponent)
        slopes: Slopes = {}
        for n, by_case in zip(self.cases, slope, strict=True):
            u = physics.displacement(n)
            factor = -float(by_case) * physics.cases[n].weight
            add(slopes, {k: factor * form for k, form in physics.by_stiffness(u, u).items()})
        ratio = correction(physics, self.key, worst, float(values.max()))
        return scaled(ratio, worst, slopes)

    def truth(self, physics: Physics) -> float:
        """The greatest."""
        return float(self._values(physics).max())

    def report(self, value: float) -> float:
        """As it is."""
        return value


@dataclass(frozen=True, slots=True, kw_only=True)
class MeanMotionResponse:
    """Mean motion of nodes along a direction, mm, with its sign.

    Attributes
    ----------
    case : int
    nodes : ndarray of bool, (nz+1, ny+1, nx+1)
    direction : tuple of float
        Unit vector.
    key : str
        A name of its own for what the solver keeps.
    """

    case: int
    nodes: Bools
    direction: Vector
    key: str
    name: str = "mean displacement"
    unit: str = "mm"

    def value(self, physics: Physics) -> tuple[float, Slopes]:
        """Linear in u."""
        weight = self.nodes / float(self.nodes.sum())
        moved = along(physics.displacement(self.case), self.direction)
        return float((weight * moved).sum()), by_motion(
            physics, self.case, weight, self.direction, self.key
        )

    def report(self, value: float) -> float:
        """As it is."""
        return value


@dataclass(frozen=True, slots=True, kw_only=True)
class LargestMotionResponse:
    """Largest distance of nodes from where they should be, along a direction, over a size.

    Attributes
    ----------
    case : int
    nodes : ndarray of bool, (nz+1, ny+1, nx+1)
    aim : ndarray of float, the same shape
        Wanted motion, mm: 0 for the largest displacement.
    size : float
        What the distance is divided by, mm: 1 for a displacement in mm.
    direction : tuple of float
    exponent : float
    key, name, unit : str
    """

    case: int
    nodes: Bools
    aim: Array
    size: float
    direction: Vector
    exponent: float
    key: str
    name: str = "largest displacement"
    unit: str = "mm"

    def _miss(self, physics: Physics) -> Array:
        moved = along(physics.displacement(self.case), self.direction)
        return np.where(self.nodes, moved - self.aim, 0.0) / self.size

    def value(self, physics: Physics) -> tuple[float, Slopes]:
        """The smooth maximum of the sizes."""
        miss = self._miss(physics)
        worst, slope = smooth_maximum(np.abs(miss), self.exponent)
        slope = slope * np.sign(miss) / self.size
        slopes = by_motion(physics, self.case, slope, self.direction, self.key)
        ratio = correction(physics, self.key, worst, float(np.abs(miss).max()))
        return scaled(ratio, worst, slopes)

    def truth(self, physics: Physics) -> float:
        """The largest."""
        return float(np.abs(self._miss(physics)).max())

    def report(self, value: float) -> float:
        """As it is."""
        return value


@dataclass(frozen=True, slots=True, kw_only=True)
class TargetErrorResponse:
    """Relative error of a deflection itself, not its square as in `TargetResponse`: for limits."""

    square: TargetResponse
    name: str = "relative error of the deflection"
    unit: str = ""

    def value(self, physics: Physics) -> tuple[float, Slopes]:
        """The root; its slope is held finite where the error vanishes."""
        square, slopes = self.square.value(physics)
        root = float(np.sqrt(max(square, 1e-24)))
        return root, {key: 0.5 / root * slope for key, slope in slopes.items()}

    def report(self, value: float) -> float:
        """As it is."""
        return value

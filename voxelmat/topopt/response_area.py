"""Area of the surfaces that a design makes: between solid and empty, and between resins.

The total variation of a field: the integral of the size of its gradient, which for a sharp or
evenly blurred surface is its area whichever way it looks, unlike a count of voxel faces (that of
a sphere is 1.5 times too large). Gradients are taken at the nodes: the mean of the differences
across the faces that meet there, so planes along the grid are exact up to the shape's outside.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from voxelmat.topopt.physics import Physics
from voxelmat.topopt.responses import Slopes

__all__ = ["AreaResponse", "NodeGradient"]

Array = NDArray[np.float64]
Bools = NDArray[np.bool_]

# The size of a gradient is rounded below this share of a full step.
_ROUND = 1e-3


class NodeGradient:
    """Mean differences at nodes, and their transpose.

    Parameters
    ----------
    inside : ndarray of bool, (nz, ny, nx)
        Voxels that take part; differences to others do not count.
    spacing : tuple of float
        mm, along x, y, z.
    """

    def __init__(self, inside: Bools, spacing: tuple[float, float, float]) -> None:
        self._h = spacing[::-1]
        self.nodes = tuple(n + 1 for n in inside.shape)
        self.exists = [self._both(inside, axis) for axis in range(3)]
        self._scale = []
        for axis in range(3):
            count = self._gather(self.exists[axis].astype(np.float64), axis)
            self._scale.append(
                np.divide(1.0 / self._h[axis], count, out=np.zeros_like(count), where=count > 0)
            )
        touching = np.zeros(self.nodes)
        for a in range(8):
            at = tuple(slice(a >> b & 1, (a >> b & 1) + n) for b, n in enumerate(inside.shape))
            touching[at] += inside
        self.volume = float(np.prod(spacing)) / 8.0 * touching

    def _both(self, inside: Bools, axis: int) -> Bools:
        low, high = self.sides(axis)
        return np.asarray(inside[low] & inside[high])

    @staticmethod
    def sides(axis: int) -> tuple[tuple[slice, ...], tuple[slice, ...]]:
        """Voxels on either side of the faces across an array axis."""
        low, high = [slice(None)] * 3, [slice(None)] * 3
        low[axis], high[axis] = slice(None, -1), slice(1, None)
        return tuple(low), tuple(high)

    def _corners(self, axis: int) -> list[tuple[slice, ...]]:
        """Where the four nodes of all faces across an axis lie."""
        found = []
        for a in (0, 1):
            for b in (0, 1):
                shift = iter((a, b))
                at = [
                    slice(1, -1) if d == axis else slice(s := next(shift), n - 1 + s)
                    for d, n in enumerate(self.nodes)
                ]
                found.append(tuple(at))
        return found

    def _gather(self, faces: Array, axis: int) -> Array:
        out = np.zeros(self.nodes)
        for at in self._corners(axis):
            out[at] += faces
        return out

    def __call__(self, steps: list[Array]) -> Array:
        """Gradient at nodes, (3, nodes), of differences across the faces along z, y, x."""
        return np.stack([
            self._scale[a] * self._gather(np.where(self.exists[a], steps[a], 0.0), a)
            for a in range(3)
        ])  # fmt: skip

    def transpose(self, cotangent: Array) -> list[Array]:
        """Slopes by the differences across faces."""
        found = []
        for axis in range(3):
            scaled = self._scale[axis] * cotangent[axis]
            total = np.sum([scaled[at] for at in self._corners(axis)], axis=0)
            found.append(np.where(self.exists[axis], total, 0.0))
        return found


@dataclass(frozen=True, slots=True, kw_only=True)
class AreaResponse:
    """Area between solid and empty (``"perimeter"``) or between resins (``"interface"``), mm^2.

    Attributes
    ----------
    kind : str
    gradient : NodeGradient
        Of the voxels that count.
    step : float
        Size of the gradient of a sharp surface, 1/mm.
    name, unit : str
    """

    kind: Literal["perimeter", "interface"]
    gradient: NodeGradient
    step: float
    name: str
    unit: str = "mm^2"

    @property
    def most(self) -> float:
        """As if a sharp surface went through every voxel, mm^2."""
        return self.step * float(self.gradient.volume.sum())

    def value(self, physics: Physics) -> tuple[float, Slopes]:
        """Needs no solve."""
        rho, w = physics.fields.rho, physics.fields.w
        if self.kind == "perimeter":
            area, by_step = self._variation([np.diff(rho, axis=a) for a in range(3)])
            slope = np.zeros_like(rho)
            for a, g in enumerate(by_step):
                low, high = NodeGradient.sides(a)
                slope[high] += g
                slope[low] -= g
            return area, {"rho": slope}
        total, by_rho, by_w = 0.0, np.zeros_like(rho), np.zeros_like(w)
        for m in range(len(w)):
            total += 0.5 * self._resin(rho, w[m], by_rho, by_w[m])
        return total, {"rho": by_rho, "w": by_w}

    def _resin(self, rho: Array, w: Array, by_rho: Array, by_w: Array) -> float:
        """Variation of one fraction; a step counts as far as both voxels are solid."""
        steps = [np.diff(w, axis=a) for a in range(3)]
        sides = [NodeGradient.sides(a) for a in range(3)]
        both = [rho[low] * rho[high] for low, high in sides]
        area, by_step = self._variation([s * b for s, b in zip(steps, both, strict=True)])
        for a, (low, high) in enumerate(sides):
            g = 0.5 * by_step[a]
            by_w[high] += g * both[a]
            by_w[low] -= g * both[a]
            by_rho[low] += g * steps[a] * rho[high]
            by_rho[high] += g * steps[a] * rho[low]
        return area

    def _variation(self, steps: list[Array]) -> tuple[float, list[Array]]:
        d = self.gradient(steps)
        least = _ROUND * self.step
        size = np.sqrt((d**2).sum(0) + least**2)
        area = float((self.gradient.volume * (size - least)).sum())
        return area, self.gradient.transpose(self.gradient.volume / size * d)

    def report(self, value: float) -> float:
        """As it is: a thousandth below the area of a sharp surface."""
        return value

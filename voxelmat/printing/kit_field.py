"""Boxes, rods and cell patterns joined and cut by formula in one signed distance on a grid."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import DISTANCE_STEPS

__all__ = ["KitField"]

Field = NDArray[np.float32]
Point = Sequence[float]


def _box(at: Sequence[Field], low: Point, high: Point) -> Field:
    """Exact signed distance of a box for broadcast coordinates."""
    out = [np.maximum(a - x, x - b) for a, x, b in zip(low, at, high, strict=True)]
    beyond = sum(np.maximum(q, 0) ** 2 for q in out)
    inside = np.maximum(np.maximum(out[0], out[1]), out[2])
    return np.asarray(np.sqrt(beyond) + np.minimum(inside, 0), dtype=np.float32)


class KitField:
    """A solid under construction.

    Parameters
    ----------
    grid : VoxelGrid
        Of equal spacing along all axes.

    Attributes
    ----------
    distance : ndarray of float32
        Negative inside, mm, beyond eight voxels from a surface not exact.
    label : ndarray of uint16
        What was laid last at each voxel.
    """

    def __init__(self, grid: VoxelGrid) -> None:
        self.grid = grid
        self._h = grid.spacing[0]
        self._reach = 8.0 * self._h
        self.distance = np.full(grid.shape, self._reach, dtype=np.float32, order="F")
        self.label = np.ones(grid.shape, dtype=np.uint16, order="F")
        self._centres = [c.astype(np.float32) for c in grid.centres()]

    def snapped(self, value: float, axis: int) -> float:
        """The voxel centre next to a coordinate, so that what is thin lies evenly about it."""
        start = self.grid.origin[axis]
        return float(start + (np.floor((value - start) / self._h) + 0.5) * self._h)

    # ------------------------------------------------------------------ shapes
    def box(self, low: Point, high: Point, label: int = 1, *, cut: bool = False) -> None:
        """Join a box, or cut it away."""
        at, view = self._near(low, high)
        self._merge(_box(at, low, high), view, label, cut=cut)

    def rod(
        self, axis: int, centre: Point, diameter: float, ends: tuple[float, float], *, cut: bool
    ) -> None:
        """Join a round rod along an axis, or cut it away; `centre` counts across the axis."""
        low, high = list(centre), list(centre)
        for a in range(3):
            if a != axis:
                low[a] -= diameter / 2
                high[a] += diameter / 2
        low[axis], high[axis] = ends
        at, view = self._near(low, high)
        across = [at[a] - centre[a] for a in range(3) if a != axis]
        side = np.sqrt(across[0] ** 2 + across[1] ** 2) - diameter / 2
        end = np.maximum(ends[0] - at[axis], at[axis] - ends[1])
        beyond = np.sqrt(np.maximum(side, 0) ** 2 + np.maximum(end, 0) ** 2)
        distance = beyond + np.minimum(np.maximum(side, end), 0)
        self._merge(distance.astype(np.float32), view, 1, cut=cut)

    def cells(
        self, cells: NDArray[np.bool_], size: float, corner: tuple[float, float], z: Point
    ) -> None:
        """Join a pattern of square cells ``[column, row]`` with an empty border, raised."""
        width, depth = (n * size for n in cells.shape)
        low = (corner[0], corner[1], z[0])
        high = (corner[0] + width, corner[1] + depth, z[1])
        at, view = self._near(low, high)
        flat = (at[0], at[1], np.zeros((1, 1, 1), dtype=np.float32))
        far = np.full((at[0].size, at[1].size, 1), 2 * self._reach, dtype=np.float32)
        nearest = {True: far, False: far}
        for c, r in np.ndindex(*cells.shape):
            a = (corner[0] + c * size, corner[1] + r * size, -1e6)
            b = (a[0] + size, a[1] + size, 1e6)
            filled = bool(cells[c, r])
            to_cell = np.maximum(_box(flat, a, b), 0)
            nearest[filled] = np.minimum(nearest[filled], to_cell)
        outline = nearest[True] - nearest[False]
        self._merge(np.maximum(outline, np.maximum(z[0] - at[2], at[2] - z[1])), view, 1, cut=False)

    # ------------------------------------------------------------------ joining
    def _near(self, low: Point, high: Point) -> tuple[list[Field], tuple[slice, ...]]:
        """Coordinates and voxels within reach of a box."""
        view = []
        for axis in range(3):
            first = np.searchsorted(self._centres[axis], low[axis] - self._reach)
            last = np.searchsorted(self._centres[axis], high[axis] + self._reach)
            view.append(slice(int(first), int(last)))
        at = np.ix_(*(c[v] for c, v in zip(self._centres, view, strict=True)))
        return list(at), tuple(view)

    def _merge(self, new: Field, view: tuple[slice, ...], label: int, *, cut: bool) -> None:
        old = self.distance[view]
        if cut:
            self.distance[view] = np.maximum(old, -new)
            return
        mine = new < np.minimum(old, self._h)  # what lies on top decides the material
        mine |= new <= 0
        self.label[view] = np.where(mine, np.uint16(label), self.label[view])
        self.distance[view] = np.minimum(old, new)

    # ------------------------------------------------------------------ as a part holds it
    def steps(self) -> NDArray[np.int8]:
        """The signed distance as a `Part` holds it."""
        steps = np.rint(self.distance * (DISTANCE_STEPS / self._h))
        return np.asarray(np.clip(steps, -127, 127), dtype=np.int8)

    def occupancy(self) -> NDArray[np.uint8]:
        """Solid fraction of each voxel, exact for walls at least a voxel thick."""
        share = np.rint(255 * (0.5 - self.distance / self._h))
        return np.asarray(np.clip(share, 0, 255), dtype=np.uint8)

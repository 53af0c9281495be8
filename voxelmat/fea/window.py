"""The box of a grid that holds material: a mostly empty grid costs by its part, not its box."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

__all__ = ["Window"]

# A box with more than this share of the grid's voxels is not worth the copies.
_WORTH = 0.9


class Window:
    """Cuts voxel and node arrays to a box and puts node fields back.

    Parameters
    ----------
    solid : ndarray of bool, shape (nz, ny, nx)
        The box is the smallest that holds every True voxel; the whole grid where there is none,
        or where the box is nearly as large.
    """

    def __init__(self, solid: NDArray[np.bool_]) -> None:
        whole = tuple(slice(0, n) for n in solid.shape)
        box = []
        for axis in range(3):
            others = tuple(a for a in range(3) if a != axis)
            full = np.flatnonzero(solid.any(axis=others))
            box.append(slice(int(full[0]), int(full[-1]) + 1) if full.size else whole[axis])
        size = np.prod([s.stop - s.start for s in box])
        chosen = tuple(box) if size <= _WORTH * solid.size else whole
        self._voxels = chosen
        self._nodes = (slice(None), *(slice(s.start, s.stop + 1) for s in chosen))
        self._shape = (3, *(n + 1 for n in solid.shape))
        #: Whether it is smaller than the grid.
        self.cuts = chosen != whole

    def voxels(self, a: NDArray[Any]) -> NDArray[Any]:
        """Cut ``[nz, ny, nx]``; C-contiguous."""
        return np.ascontiguousarray(a[self._voxels])

    def nodes(self, a: NDArray[Any]) -> NDArray[Any]:
        """Cut ``[c, nz+1, ny+1, nx+1]``; C-contiguous."""
        return np.ascontiguousarray(a[self._nodes])

    def holds(self, a: NDArray[Any]) -> bool:
        """Whether a node field is 0 outside."""
        return not self.cuts or bool(np.count_nonzero(a) == np.count_nonzero(a[self._nodes]))

    def whole(self, a: NDArray[Any]) -> NDArray[Any]:
        """A node field of the box on the whole grid, 0 outside."""
        if not self.cuts:
            return a
        out = np.zeros(self._shape, dtype=a.dtype)
        out[self._nodes] = a
        return out

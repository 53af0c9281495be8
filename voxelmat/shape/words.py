"""Places in messages: where something is, in mm, with as many digits as help to find it."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

import numpy as np
from numpy.typing import NDArray

from voxelmat.model.grid import VoxelGrid

__all__ = ["middle_voxel", "place_text", "voxel_centre"]


def place_text(point: Iterable[float]) -> str:
    """Print a point to a micrometre.

    Examples
    --------
    >>> place_text((1.23456, -0.00001, 250.0))
    '(1.235, 0, 250) mm'
    """
    shown = ", ".join(f"{round(float(x), 3) + 0.0:.7g}" for x in point)
    return f"({shown}) mm"


def voxel_centre(grid: VoxelGrid, index: Iterable[int]) -> tuple[float, float, float]:
    """Centre of voxel (i, j, k), mm."""
    x, y, z = (
        o + (int(n) + 0.5) * h for o, n, h in zip(grid.origin, index, grid.spacing, strict=True)
    )
    return x, y, z


def middle_voxel(at: Sequence[NDArray[np.intp]]) -> tuple[int, int, int]:
    """Of voxels (three index arrays, not empty), the one nearest to the middle of all."""
    off = sum((axis - axis.mean()) ** 2 for axis in at)
    nearest = int(np.argmin(off))
    i, j, k = (int(axis[nearest]) for axis in at)
    return i, j, k

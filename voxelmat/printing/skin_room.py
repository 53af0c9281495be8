"""Room for a skin of support: empty voxels round a part, and a window that is wider than it."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from voxelmat.errors import InputError
from voxelmat.io.bigpart import AnyPart
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part
from voxelmat.printing.bias import with_margin
from voxelmat.printing.place import Box, rotation_matrix

__all__ = ["box_with_skin", "part_with_skin"]


def part_with_skin(part: AnyPart, thickness: float) -> Part:
    """The part on a grid with room for a skin of so many mm all round.

    Raises
    ------
    InputError
        If the part is streamed from a store, which has no room to add.
    """
    if not isinstance(part, Part):
        raise InputError(
            f"Part '{part.name}' is streamed from a store, which a skin of support cannot be laid "
            "round. Take the policy 'grid' or 'columns', or load the part.",
            key="support.policy",
        )
    voxels = [math.ceil(thickness / h) + 1 for h in part.grid.spacing]
    if part.distance is not None:
        return with_margin(part, voxels)
    pads = [(n, n) for n in voxels]
    nx, ny, nz = (m + 2 * n for m, n in zip(part.grid.shape, voxels, strict=True))
    x, y, z = (
        o - n * h for o, n, h in zip(part.grid.origin, voxels, part.grid.spacing, strict=True)
    )
    return part.replace(
        grid=VoxelGrid(shape=(nx, ny, nz), spacing=part.grid.spacing, origin=(x, y, z)),
        labels=np.pad(part.labels, pads),
        occupancy=None if part.occupancy is None else np.pad(part.occupancy, pads),
        bodies={name: np.pad(mask, pads) for name, mask in part.bodies.items()},
    )


def box_with_skin(box: Box, thickness: float, orientation: Sequence[str]) -> Box:
    """The box of a part and its skin, part coordinates; on the tray's upper side there is none."""
    up = rotation_matrix(orientation)[2]
    low, high = (list(corner) for corner in box)
    for axis in range(3):
        low[axis] -= 0.0 if up[axis] < 0 else thickness
        high[axis] += 0.0 if up[axis] > 0 else thickness
    return ((low[0], low[1], low[2]), (high[0], high[1], high[2]))

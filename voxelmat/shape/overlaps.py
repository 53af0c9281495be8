"""Where bodies overlap, by how much, and which of them it belongs to."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from voxelmat.errors import InputError
from voxelmat.model.grid import VoxelGrid
from voxelmat.shape.bodies import Body, Event, strength
from voxelmat.shape.voxelise import VoxelShape
from voxelmat.shape.words import middle_voxel, place_text, voxel_centre
from voxelmat.units import number

__all__ = ["TOUCH", "find_overlaps"]

#: Bodies that share less than this of any voxel (of 255) touch; they do not overlap. Two
#: meshes of one curved surface never meet exactly.
TOUCH = 13


def _window(a: Body, b: Body, grid: VoxelGrid) -> tuple[slice, slice, slice] | None:
    """The voxels where the boxes of two bodies meet."""
    low = np.maximum(a.mesh.bounds[0], b.mesh.bounds[0])
    high = np.minimum(a.mesh.bounds[1], b.mesh.bounds[1])
    origin, spacing = np.array(grid.origin), np.array(grid.spacing)
    first = np.maximum(np.floor((low - origin) / spacing), 0).astype(int)
    last = np.minimum(np.ceil((high - origin) / spacing), grid.shape).astype(int)
    if (first >= last).any():
        return None
    return (
        slice(first[0], last[0]),
        slice(first[1], last[1]),
        slice(first[2], last[2]),
    )


def find_overlaps(
    bodies: Sequence[Body], shapes: Sequence[VoxelShape], grid: VoxelGrid
) -> list[Event]:
    """Compare each two bodies whose boxes meet.

    Raises
    ------
    InputError
        If two bodies overlap and nothing decides which of them wins.
    """
    events = []
    for n, a in enumerate(bodies):
        for m in range(n + 1, len(bodies)):
            window = _window(a, bodies[m], grid)
            if window is None:
                continue
            both = shapes[n].occupancy[window].astype(np.int16) + shapes[m].occupancy[window]
            # Two parts of one voxel must share what is more than the whole of it.
            shared = np.maximum(both - 255, 0)
            most = int(shared.max())
            if most <= 1:
                continue  # rounding of the two fractions
            volume = float(shared.sum(dtype=np.int64)) / 255 * grid.voxel_volume
            peak = middle_voxel(np.nonzero(shared == most))
            index = [p + w.start for p, w in zip(peak, window, strict=True)]
            place = voxel_centre(grid, index)
            events.append(_settle(a, bodies[m], volume, place, most))
    return events


def _settle(a: Body, b: Body, volume: float, place: tuple[float, float, float], most: int) -> Event:
    """Say who wins an overlap, or that nothing decides it."""
    where = f"by {number(volume)} mm^3, most at {place_text(place)}"
    names = (a.name, b.name)
    if most <= TOUCH:
        text = (
            f"Bodies '{a.name}' and '{b.name}' touch; their surfaces cross {where}, less than "
            f"{number(100 * TOUCH / 255, 1)} % of any voxel."
        )
        return Event(kind="touch", bodies=names, volume_mm3=volume, place=place, message=text)
    undecided = a.bought_in == b.bought_in and (
        a.priority is None or b.priority is None or a.priority == b.priority
    )
    if undecided:
        given = ", ".join(
            f"'{body.name}' has " + ("none" if body.priority is None else f"{body.priority}")
            for body in (a, b)
        )
        raise InputError(
            f"Bodies '{a.name}' and '{b.name}' overlap {where}, and no priority decides which of "
            f"them it belongs to ({given}). Give both a priority, the higher one wins, or change "
            "the meshes."
        )
    winner, loser = (a, b) if strength(a) > strength(b) else (b, a)
    why = "it is bought in" if winner.bought_in != loser.bought_in else "higher priority"
    text = (
        f"Bodies '{a.name}' and '{b.name}' overlap {where}; that volume belongs to "
        f"'{winner.name}' ({why})."
    )
    return Event(kind="overlap", bodies=names, volume_mm3=volume, place=place, message=text)

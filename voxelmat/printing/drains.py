"""Rooms in a part whose widest way out is too narrow to clean support from.

The empty space of a part is taken on coarse cells. Its clearance (distance to the nearest solid)
is flooded from wide to narrow: where a room first meets the outside is the narrowest place of its
widest way out, along any axis (a maximin path). That place is then measured on the droplet sites.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from voxelmat.kernels.maximin import clearance_squared, sort_levels, widest_ways
from voxelmat.model.finding import Finding
from voxelmat.model.profile import PrintProfile
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.coarse import CoarsePart, coarse_parts
from voxelmat.printing.measure import Sites, width_at
from voxelmat.printing.pieces import Piece
from voxelmat.printing.readback import Stack
from voxelmat.printing.thickness import solid_block
from voxelmat.units import quantity

__all__ = ["CLEANING_WIDTH", "Drain", "drain_findings", "drains"]

#: Support is washed or picked out of nothing narrower, mm. Ours: the width of a fine tool.
CLEANING_WIDTH = 1.0
_CELLS_ACROSS = 5  # cells across the limit
_FEWEST_ACROSS = 2.5  # with fewer a drain of the limit cannot be told from a closed wall
_MOST_ROOMS = 10_000
_NAMED = 3
_LOOKED_AT = 16  # cells round the narrowest place that are measured


@dataclass(frozen=True, slots=True)
class Drain:
    """The widest way out of one room.

    Attributes
    ----------
    width : float
        At its narrowest, mm; 0 where there is none.
    place, room : tuple of int
        Layer, row and column of a site there, and of one in the widest part of the room.
    volume : float
        Of the room up to there, mm^3, at least.
    """

    width: float
    place: Sites
    room: Sites
    volume: float


def drains(stack: Stack, coarse: CoarsePart, limit: float) -> list[Drain]:
    """Rooms of one part whose widest way out is narrower than `limit`, mm, narrowest first."""
    edge = min(coarse.edge)
    cap = limit / 2 + 2 * edge
    reach = np.array([math.ceil(cap / e) for e in coarse.edge], dtype=np.int64)
    fill = np.pad(coarse.fill, 1)
    squared = np.empty(fill.shape, np.float32)
    solid = (fill >= 128).astype(np.uint8)
    clearance_squared(solid, np.array(coarse.edge), reach, squared)
    per_level = cap / 250
    level = np.minimum(np.sqrt(squared) / per_level, 250).astype(np.uint8)
    # A cell with any room in it lets a way through that is narrower than a cell.
    level = np.where(solid > 0, (fill < 255).astype(np.uint8), np.maximum(level, 2))
    for axis in range(3):
        for side in (0, -1):
            np.moveaxis(level, axis, 0)[side] = 255
    flat = level.ravel()
    order = np.empty(flat.size, np.int32)
    n = sort_levels(flat, order)
    events = np.empty((_MOST_ROOMS, 4), np.int64)
    work = [np.full(flat.size, -1, np.int32) for _ in range(3)]
    strides = np.array([level.shape[1] * level.shape[2], level.shape[2], 1], dtype=np.int64)
    least = max(2, round(edge / per_level))
    found = widest_ways(flat, strides, order, n, *work, least, events)
    rooms = [tuple(int(v) for v in e) for e in events[: min(found, _MOST_ROOMS)]]
    result = [_drain(stack, coarse, level, room, least, limit) for room in rooms]
    return sorted((d for d in result if d.width < limit), key=lambda d: d.width)


def _drain(
    stack: Stack,
    coarse: CoarsePart,
    level: NDArray[np.uint8],
    room: tuple[int, ...],
    least: int,
    limit: float,
) -> Drain:
    """Measure what the flood found at one cell on the sites round it."""
    peak, meeting, _, cells = room
    inside = coarse.site(_cell(peak, level.shape))
    volume = cells * math.prod(coarse.edge)
    if meeting < 0:
        return Drain(0.0, inside, inside, volume)
    z, y, x = (e / n for e, n in zip(coarse.edge, coarse.sites, strict=True))
    pitch = (z, y, x)
    reach = [math.ceil(limit / p) + 3 * n for p, n in zip(pitch, coarse.sites, strict=True)]
    first = coarse.site(_cell(meeting, level.shape))
    low = [a - n for a, n in zip(first, reach, strict=True)]
    high = [a + n + r for a, n, r in zip(first, coarse.sites, reach, strict=True)]
    empty = ~solid_block(stack, (low[0], low[1], low[2]), (high[0], high[1], high[2]))
    depth = ndimage.distance_transform_edt(empty, sampling=pitch)
    best = (math.inf, first)
    for cell in _way(level, meeting, least):
        start = [a - b for a, b in zip(coarse.site(cell), low, strict=True)]
        cut = tuple(slice(a, a + n) for a, n in zip(start, coarse.sites, strict=True))
        off = np.unravel_index(int(depth[cut].argmax()), coarse.sites)
        k, j, i = (a + int(b) for a, b in zip(start, off, strict=True))
        if empty[k, j, i]:
            width, _ = width_at(empty, (k, j, i), pitch)
            best = min(best, (width, (low[0] + k, low[1] + j, low[2] + i)))
    return Drain(best[0] if math.isfinite(best[0]) else 0.0, best[1], inside, volume)


def _way(level: NDArray[np.uint8], meeting: int, least: int) -> list[Sites]:
    """The cells round the meeting that are about as wide: it lies at an end of the drain."""
    at = np.unravel_index(meeting, level.shape)
    cut = tuple(slice(max(1, int(a) - 2), int(a) + 3) for a in at)
    here = level[cut].astype(int) - int(level[at])
    here[(here < 0) | (here > least // 2) | (level[cut] == 255)] = 256
    order = np.argsort(here, axis=None, kind="stable")[:_LOOKED_AT]
    near = [np.unravel_index(int(v), here.shape) for v in order if here.flat[int(v)] < 256]
    cells = [tuple(int(v) + c.start - 1 for v, c in zip(n, cut, strict=True)) for n in near]
    return [(c[0], c[1], c[2]) for c in cells]


def _cell(flat: int, shape: tuple[int, ...]) -> Sites:
    """The cell of an index into the padded block."""
    z, y, x = (int(v) - 1 for v in np.unravel_index(max(flat, 0), shape))
    return (z, y, x)


def drain_findings(
    stack: Stack,
    profile: PrintProfile | None = None,
    *,
    width: float | None = None,
    sealed: Sequence[Piece] = (),
    monitor: Monitor = SILENT,
) -> list[Finding]:
    """Rooms that cannot be cleaned, with the width and the place of their widest way out.

    Parameters
    ----------
    stack : Stack
    profile : PrintProfile, optional
        The one in the manifest if left out.
    width : float, optional
        Least width of a way out, mm; the larger of the profile's smallest gap and
        `CLEANING_WIDTH` if left out.
    sealed : sequence of Piece
        Cavities without any way out that are reported already (`Facts.hollows`).
    monitor : Monitor

    Returns
    -------
    list of Finding
        Codes "narrow drain" (value is the width, mm), "sealed cavity", and the note "drains not
        judged" for a part too large for cells that could tell.
    """
    profile = stack.profile if profile is None else profile
    limit = max(profile.minimum.gap, CLEANING_WIDTH) if width is None else width
    found: list[Finding] = []
    for coarse in coarse_parts(stack, limit / _CELLS_ACROSS, monitor=monitor):
        name = coarse.part.name if len(stack.parts) > 1 else ""
        if max(coarse.edge) * _FEWEST_ACROSS > limit:
            found.append(_not_judged(coarse, name, limit))
            continue
        result = [d for d in drains(stack, coarse, limit) if not _known(d, coarse, sealed)]
        found += list(_named(stack, coarse, name, result, limit))[:_NAMED]
    return found


def _known(drain: Drain, coarse: CoarsePart, sealed: Sequence[Piece]) -> bool:
    """Whether a room without a way out is among those reported already."""
    radius = [
        ((3 * drain.volume / 4 / math.pi) ** (1 / 3) * 3 + 2 * max(coarse.edge)) * n / e
        for n, e in zip(coarse.sites, coarse.edge, strict=True)
    ]
    return drain.width < min(coarse.edge) and any(
        all(abs(a - b) <= r for a, b, r in zip(p.place[::-1], drain.room, radius, strict=True))
        for p in sealed
    )


def _not_judged(coarse: CoarsePart, name: str, limit: float) -> Finding:
    return Finding(
        severity="note",
        code="drains not judged",
        message=f"The part is too large to look for ways out narrower than {limit:g} mm: cells of "
        f"{max(coarse.edge):.3g} mm fit the memory.",
        remedy="Check by eye that support can be cleaned out of every cavity.",
        value=max(coarse.edge),
        limit=limit / _FEWEST_ACROSS,
        unit="mm",
        part=name,
    )


def _named(
    stack: Stack, coarse: CoarsePart, name: str, found: list[Drain], limit: float
) -> Iterator[Finding]:
    for drain in found:
        _, place = stack.locate(*(drain.place if drain.width > 0 else drain.room))
        room = f"A cavity of at least {quantity(drain.volume, 'mm^3')}"
        if drain.width > 0:
            said = f"{room} opens only through {quantity(drain.width, 'mm')}"
        else:
            said = f"{room} has no way out"
        yield Finding(
            severity="warn",
            code="narrow drain" if drain.width > 0 else "sealed cavity",
            message=f"{said}; cleaning takes {limit:g} mm ({len(found)} such cavities in all, "
            f"judged on cells of {max(coarse.edge):.3g} mm).",
            place_mm=place,
            remedy=f"Widen the drain to {limit:g} mm, add one, or fill the cavity with a resin.",
            value=drain.width,
            limit=limit,
            unit="mm",
            part=name,
        )

"""The outline of a stack, read back from its images, against the design's mesh or distance."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from voxelmat.errors import InputError
from voxelmat.model.deviation import ChannelOutline, OutlineDeviation
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import DISTANCE_STEPS, Part
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.readback import Stack
from voxelmat.printing.support import outline_field
from voxelmat.printing.view import PartView, part_view
from voxelmat.shape.bodies import Body
from voxelmat.shape.pointdistance import distance_to_bodies

__all__ = ["OutlinePoints", "field_at", "outline_deviation", "outline_points"]

Array = NDArray[np.float64]
_LAYERS = 48  # layers that are looked at, evenly spread
_POINTS = 200_000  # points of the outline that are compared, evenly taken
#: Beyond half a pitch, which rounding to whole sites explains, 95 % of the outline may lie off by
#: so much of a voxel (chords of a curved outline, rounding of the distance), and every point by
#: the second (edges are rounded between voxel centres). Both limits are ours.
CHORD_P95, CHORD_LARGEST = 0.15, 0.75
_CROSS = 0.02  # share of the outline that must lie across an axis to tell a shift along it


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class OutlinePoints:
    """Where solid meets empty between two neighbouring sites.

    Attributes
    ----------
    points : ndarray of float64, shape (n, 3)
        Half way between the two site centres, part coordinates, mm.
    channel : ndarray of int64, shape (n,)
        Channel of the solid site.
    layers : int
        Layers that were looked at.
    """

    points: Array
    channel: NDArray[np.int64]
    layers: int


def outline_points(
    view: PartView, *, layers: int = _LAYERS, most: int = _POINTS, monitor: Monitor = SILENT
) -> OutlinePoints:
    """Points of the outline in some layers, along rows, columns and up.

    Parameters
    ----------
    view : PartView
    layers, most : int
        Layers that are looked at, and points that are kept.
    monitor : Monitor
    """
    count = view.shape[0]
    chosen = np.unique(np.linspace(0, count - 1, min(layers, count)).astype(int))
    model = [m for m, c in enumerate(view.stack.channels) if c.role != "support"]
    places, channels = [], []
    for number, k in enumerate(chosen):
        monitor.report("reading the outline", done=number, total=len(chosen))
        here = _numbered(view, int(k), model)
        up = _numbered(view, int(k) + 1, model)
        padded = np.pad(here, 1)
        for axis, pair in (
            (2, (padded[1:-1, :-1], padded[1:-1, 1:])),
            (1, (padded[:-1, 1:-1], padded[1:, 1:-1])),
            (0, (here, up)),
        ):
            a, b = pair
            row, column = np.nonzero((a > 0) != (b > 0))
            place = np.stack([np.full(len(row), float(k)), row, column], axis=1)
            place[:, axis] += 0.5 if axis == 0 else -0.5
            places.append(place)
            channels.append(np.maximum(a, b)[row, column].astype(np.int64) - 1)
    pixels, channel = np.concatenate(places), np.concatenate(channels)
    step = max(1, -(-len(pixels) // most))
    return OutlinePoints(
        points=view.to_part(pixels[::step]), channel=channel[::step], layers=len(chosen)
    )


def _numbered(view: PartView, layer: int, model: list[int]) -> NDArray[np.uint8]:
    """Channel number plus one of every site; 0 for empty and for support."""
    if layer >= view.shape[0]:
        return np.zeros(view.shape[1:], dtype=np.uint8)
    planes = view.channels(layer)
    site = np.zeros(planes.shape[1:], dtype=np.uint8)
    for m in model:
        site[planes[m]] = m + 1
    return site


def field_at(field: NDArray[np.int8], grid: VoxelGrid, points: Array) -> Array:
    """A distance field between its voxel centres, trilinear, mm; beyond the grid as at its rim.

    Parameters
    ----------
    field : ndarray of int8, ``[i, j, k]``
        In 1/16 of the smallest spacing.
    grid : VoxelGrid
    points : ndarray of float64, shape (n, 3)
        mm.
    """
    index = (points - np.array(grid.origin)) / np.array(grid.spacing) - 0.5
    value = ndimage.map_coordinates(field, index.T, output=np.float64, order=1, mode="nearest")
    return np.asarray(value * (min(grid.spacing) / DISTANCE_STEPS))


def _normals(field: NDArray[np.int8], grid: VoxelGrid, points: Array) -> Array:
    """Unit outward normals of the field's levels at points, (n, 3); 0 where it is flat."""
    slope = np.empty((len(points), 3))
    for axis in range(3):
        half = np.zeros(3)
        half[axis] = 0.5 * grid.spacing[axis]
        ahead = field_at(field, grid, points + half)
        slope[:, axis] = (ahead - field_at(field, grid, points - half)) / grid.spacing[axis]
    size = np.linalg.norm(slope, axis=1, keepdims=True)
    return np.asarray(slope / np.where(size > 1e-9, size, 1.0))


def outline_deviation(
    stack: Stack,
    part: Part,
    *,
    bodies: Sequence[Body] = (),
    printed: Part | None = None,
    name: str | None = None,
    monitor: Monitor = SILENT,
) -> OutlineDeviation:
    """Compare the outline of a stack with that of its design.

    Parameters
    ----------
    stack : Stack
    part : Part
        The design.
    bodies : sequence of Body, optional
        Its meshes; without them the design's own signed distance is taken, which does not see
        what was lost between mesh and voxels.
    printed : Part, optional
        The design with its outline compensated for the printer's bias, where that differs; the
        stack is expected there.
    name : str, optional
        Of the part on a tray of several.
    monitor : Monitor

    Raises
    ------
    InputError
        If the part has no outline finer than its voxels, or the stack is empty.
    FileFormatError
        If a layer is missing or not the one that was written.
    """
    target = part if printed is None else printed
    if target.distance is None and target.occupancy is None:
        raise InputError(
            "The part came without a signed distance, so there is no outline to compare with."
        )
    view = part_view(stack, name)
    found = outline_points(view, monitor=monitor)
    if not len(found.points):
        raise InputError("The stack has no outline: nothing in it is solid.")
    grid, smallest = part.grid, min(part.grid.spacing)
    field = outline_field(target)
    at_field = field_at(field, target.grid, found.points)
    if bodies:
        own = outline_field(part)
        bias = field_at(own, grid, found.points) - at_field if printed is not None else 0.0
        deviation = distance_to_bodies(bodies, found.points) - bias
    else:
        deviation = at_field
    reach = 126 / DISTANCE_STEPS * smallest
    normals = _normals(field, target.grid, found.points)
    usual = np.abs(deviation) < max(2 * view.pitch.max(), smallest)
    rows = []
    for number, channel in enumerate(stack.channels):
        mine = found.channel == number
        if mine.any():
            rows.append(_row(channel.resin, deviation, normals, found.points, mine, usual))
    half = 0.5 * float(view.pitch.max())
    everything = np.ones(len(deviation), dtype=np.bool_)
    against = f"the mesh of {len(bodies)} bodies" if bodies else "the signed distance of the design"
    return OutlineDeviation(
        against=against + (", compensated for the printer's bias" if printed is not None else ""),
        whole=_row("all", deviation, normals, found.points, everything, usual),
        channels=tuple(rows),
        layers=found.layers,
        beyond=int((np.abs(at_field) >= reach).sum()),
        limit_p95=half + CHORD_P95 * max(grid.spacing),
        limit_largest=half + CHORD_LARGEST * max(grid.spacing),
    )


def _row(
    name: str,
    deviation: Array,
    normals: Array,
    points: Array,
    mine: NDArray[np.bool_],
    usual: NDArray[np.bool_],
) -> ChannelOutline:
    """The figures of some of the points."""
    d, at = deviation[mine], points[mine]
    size = np.abs(d)
    worst = at[int(size.argmax())]
    return ChannelOutline(
        name=name,
        points=len(d),
        mean=float(d.mean()),
        rms=float(np.sqrt((d**2).mean())),
        p95=float(np.quantile(size, 0.95)),
        largest=float(size.max()),
        place_mm=(float(worst[0]), float(worst[1]), float(worst[2])),
        shift_mm=_shift(deviation[mine & usual], normals[mine & usual]),
    )


def _shift(deviation: Array, normals: Array) -> tuple[float, float, float] | None:
    """The translation that explains the deviations best, by least squares over the normals.

    Growth or shrinkage of the outline is solved for beside it, so that a resin which forms one
    side only gives no shift: its outline may as well have grown.
    """
    if len(deviation) < 30:
        return None
    across = (normals**2).mean(axis=0) >= _CROSS
    both = np.array(
        [min((normals[:, a] > 0.3).mean(), (normals[:, a] < -0.3).mean()) for a in range(3)]
    )
    told = across & (both >= _CROSS / 4)
    if not told.any():
        return None
    table = np.column_stack([normals[:, told], np.ones(len(deviation))])
    answer = np.linalg.lstsq(table, deviation, rcond=None)[0]
    out = [math.nan] * 3
    for axis, value in zip(np.flatnonzero(told), answer, strict=False):
        out[int(axis)] = float(value)
    return (out[0], out[1], out[2])

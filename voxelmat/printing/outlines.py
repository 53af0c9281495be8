"""The outline of a stack, read back from its images, against the design's mesh or distance."""

from __future__ import annotations

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

__all__ = ["OutlinePoints", "field_at", "outline_at", "outline_deviation", "outline_points"]

Array = NDArray[np.float64]
_LAYERS = 48  # layers that are looked at, evenly spread
_POINTS = 200_000  # points of the outline that are compared, evenly taken
#: Beyond half a pitch, which rounding to whole sites explains, 95 % of the outline may lie off by
#: so much of a voxel (chords of a curved outline, rounding of the distance), and every point by
#: the second (edges are rounded between voxel centres). Both limits are ours.
CHORD_P95, CHORD_LARGEST = 0.15, 0.75
#: Share of the outline that must fit the design site by site; less may be a shift. Ours.
FIT = 0.97


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class OutlinePoints:
    """Where solid meets empty between two neighbouring sites.

    Attributes
    ----------
    solid, empty : ndarray of float64, shape (n, 3)
        The two sites as layer, row and column of the part's window.
    points : ndarray of float64, shape (n, 3)
        Half way between their centres, part coordinates, mm.
    channel : ndarray of int64, shape (n,)
        Channel of the solid site.
    layers : int
        Layers that were looked at.
    """

    solid: Array
    empty: Array
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
    places, ways, channels = [], [], []
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
            way = np.zeros_like(place)  # half way from the outline to the empty site
            way[:, axis] = np.where(a[row, column] > 0, 0.5, -0.5)
            places.append(place)
            ways.append(way)
            channels.append(np.maximum(a, b)[row, column].astype(np.int64) - 1)
    step = max(1, -(-sum(len(p) for p in places) // most))
    pixels, way = np.concatenate(places)[::step], np.concatenate(ways)[::step]
    return OutlinePoints(
        solid=pixels - way,
        empty=pixels + way,
        points=view.to_part(pixels),
        channel=np.concatenate(channels)[::step],
        layers=len(chosen),
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


def outline_at(field: NDArray[np.int8], grid: VoxelGrid, points: Array) -> Array:
    """`field_at`, except that the faces of the grid bound the outline too, mm.

    Nothing is laid beyond the grid, so a part that reaches a face of it ends there, whatever its
    distance says.
    """
    beyond = np.maximum(np.array(grid.origin) - points, points - np.array(grid.upper)).max(axis=1)
    return np.asarray(np.maximum(field_at(field, grid, points), beyond))


def _fitting(
    view: PartView, found: OutlinePoints, field: NDArray[np.int8], grid: VoxelGrid, move: Array
) -> NDArray[np.bool_]:
    """Where solid lies inside and empty outside, the images moved by layers, rows and columns."""
    inside = field_at(field, grid, view.to_part(found.solid + move)) < 0
    place = view.to_part(found.empty + move)
    low, high = np.array(grid.origin), np.array(grid.upper)
    off_grid = ((place < low) | (place > high)).any(axis=1)
    return np.asarray(inside & (off_grid | (field_at(field, grid, place) >= 0)))


def _shift(
    view: PartView, found: OutlinePoints, field: NDArray[np.int8], grid: VoxelGrid
) -> dict[int, tuple[float, tuple[int, int, int]]]:
    """For each channel, and -1 for all: the share that fits, and what shift explains the rest.

    A shift of one site explains it if less than half of the misfits are left then. The rim of the
    window is left out: a window that is as tight as the part loses its last row there.
    """
    usual = np.abs(field_at(field, grid, found.points)) < 3 * view.pitch.max()
    usual &= ((found.empty >= 0) & (found.empty < np.array(view.shape))).all(axis=1)
    groups = {-1: usual} | {int(c): usual & (found.channel == c) for c in np.unique(found.channel)}
    fits = _fitting(view, found, field, grid, np.zeros(3))
    found_fit = {n: float(fits[g].mean()) if g.any() else 1.0 for n, g in groups.items()}
    answer = {n: (fit, (0, 0, 0)) for n, fit in found_fit.items()}
    if all(fit >= FIT for fit in found_fit.values()):
        return answer
    least = {n: 0.5 * (1 - fit) for n, fit in found_fit.items()}  # misfits still left
    for axis in range(3):
        for step in (1, -1):
            move = np.zeros(3)
            move[axis] = -step
            moved = _fitting(view, found, field, grid, move)
            for number, group in groups.items():
                left = 1 - float(moved[group].mean()) if group.any() else 1.0
                if found_fit[number] < FIT and left < least[number]:
                    shift = [0, 0, 0]
                    shift[axis] = step
                    answer[number] = (found_fit[number], (shift[0], shift[1], shift[2]))
                    least[number] = left
    return answer


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
    at_field = outline_at(field, target.grid, found.points)
    if bodies:
        own = outline_field(part)
        bias = outline_at(own, grid, found.points) - at_field if printed is not None else 0.0
        deviation = distance_to_bodies(bodies, found.points) - bias
    else:
        deviation = at_field
    reach = 126 / DISTANCE_STEPS * smallest
    shifts = _shift(view, found, field, target.grid)
    rows = [
        _row(channel.resin, deviation, found.points, found.channel == number, shifts[number])
        for number, channel in enumerate(stack.channels)
        if number in shifts
    ]
    half = 0.5 * float(view.pitch.max())
    everything = np.ones(len(deviation), dtype=np.bool_)
    against = f"the mesh of {len(bodies)} bodies" if bodies else "the signed distance of the design"
    return OutlineDeviation(
        against=against + (", compensated for the printer's bias" if printed is not None else ""),
        whole=_row("all", deviation, found.points, everything, shifts[-1]),
        channels=tuple(rows),
        layers=found.layers,
        beyond=int((np.abs(at_field) >= reach).sum()),
        limit_p95=half + CHORD_P95 * max(grid.spacing),
        limit_largest=half + CHORD_LARGEST * max(grid.spacing),
    )


def _row(
    name: str,
    deviation: Array,
    points: Array,
    mine: NDArray[np.bool_],
    shift: tuple[float, tuple[int, int, int]],
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
        fit=shift[0],
        shift=shift[1],
    )

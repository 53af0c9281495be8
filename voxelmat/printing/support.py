"""Outline fields for slicing, and the support that stands below overhangs."""

from __future__ import annotations

from collections.abc import Callable
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.io.bigpart import AnyPart, z_slabs
from voxelmat.model.part import Part
from voxelmat.printing.place import Box

__all__ = [
    "CLEARANCE",
    "PlaneRow",
    "SupportFill",
    "column_support",
    "fill_columns",
    "outline_box",
    "outline_field",
    "outline_source",
    "outline_values",
]

#: Support stays so far inside the overhang's outline, in 1/16 of the smallest voxel edge, so
#: that the rounding of the distance draws no skin of support along upright walls.
CLEARANCE = 2
_HALF_VOXEL = 8  # in the same steps


class PlaneRow(Protocol):
    """Planes by number: an array ``[layer, row, column]`` or a `PlaneFile`."""

    @property
    def shape(self) -> tuple[int, ...]:
        """Layers, rows, columns."""

    def __getitem__(self, k: int) -> NDArray[np.int8]:
        """Plane `k`."""

    def __setitem__(self, k: int, plane: NDArray[np.int8]) -> None:
        """Replace plane `k`."""


#: Fills a support field from the outline: ``fill(outline, field)``. ``outline(k)`` gives int8
#: plane k of the part (negative inside), with layers going up; the field is negative inside
#: part or support. Planes may be asked for and set in any order; whole arrays may not.
SupportFill = Callable[[Callable[[int], NDArray[np.int8]], PlaneRow], None]


def outline_source(part: AnyPart) -> str:
    """What the outline is drawn from, in words for the manifest."""
    if part.distance is not None:
        return "signed distance, trilinear"
    if part.occupancy is not None:
        return "occupancy fraction, trilinear (the part came without a signed distance)"
    return "nearest voxel (the part came without a signed distance, so edges show steps)"


def outline_field(part: Part) -> NDArray[np.int8]:
    """The field whose negative side is printed, ``[i, j, k]``; only its zero level matters.

    A voxel without a printed resin (empty, or owned by a bought-in body) never counts as inside.
    """
    return outline_values(part.printed_labels(), part.labels, part.distance, part.occupancy)


def outline_values(
    printed: NDArray[np.bool_],
    labels: NDArray[np.uint16],
    distance: NDArray[np.int8] | None,
    occupancy: NDArray[np.uint8] | None,
) -> NDArray[np.int8]:
    """`outline_field` on any block of voxels; `printed` tells it for each palette entry."""
    laid = printed[labels]
    if distance is not None:
        return np.where(laid, distance, np.maximum(distance, np.int8(_HALF_VOXEL)))
    if occupancy is not None:
        return (127 - np.where(laid, occupancy, 0).astype(np.int16)).astype(np.int8)
    return np.where(laid, np.int8(-_HALF_VOXEL), np.int8(_HALF_VOXEL))


def outline_box(part: AnyPart, field: NDArray[np.int8] | None = None) -> Box:
    """Low and high corner of the outline, part coordinates, mm.

    Exact for the outline as it is drawn: along one axis a linear interpolant takes its
    extremes in the columns of voxel centres.

    Parameters
    ----------
    part : Part or StoredPart
    field : ndarray of int8, optional
        Its outline field; read from the part slab by slab if left out.

    Raises
    ------
    InputError
        If nothing of the part would be printed.
    """
    stepped = part.distance is None and part.occupancy is None
    inside = [np.zeros(n, np.bool_) for n in part.grid.shape]
    for a, b in z_slabs(part):
        negative = _outline_block(part, field, (slice(None), slice(None), slice(a, b))) < 0
        inside[0] |= negative.any(axis=(1, 2))
        inside[1] |= negative.any(axis=(0, 2))
        inside[2][a:b] = negative.any(axis=(0, 1))
    if not inside[0].any():
        raise InputError(
            f"Part '{part.name}' has nothing to print: no voxel with a printed resin lies "
            "inside its outline."
        )
    low, high = [], []
    for axis, rows in enumerate(inside):
        first, last = int(rows.argmax()), len(rows) - 1 - int(rows[::-1].argmax())
        origin, spacing = part.grid.origin[axis], part.grid.spacing[axis]
        start, end = first - 0.5, last + 0.5
        if not stepped and first > 0:
            start = first - _reach(part, field, axis, first, -1)
        if not stepped and last < len(rows) - 1:
            end = last + _reach(part, field, axis, last, 1)
        low.append(origin + (start + 0.5) * spacing)
        high.append(origin + (end + 0.5) * spacing)
    return ((low[0], low[1], low[2]), (high[0], high[1], high[2]))


def _outline_block(
    part: AnyPart, field: NDArray[np.int8] | None, index: tuple[slice, slice, slice]
) -> NDArray[np.int8]:
    """A block of the outline field, from `field` or else from the part's arrays."""
    if field is not None:
        return field[index]
    distance = None if part.distance is None else part.distance[index]
    occupancy = None if part.occupancy is None else part.occupancy[index]
    return outline_values(part.printed_labels(), part.labels[index], distance, occupancy)


def _reach(part: AnyPart, field: NDArray[np.int8] | None, axis: int, at: int, step: int) -> float:
    """How far, in voxels, the outline reaches past the centres of plane `at` of an axis."""
    values = []
    for k in (at, at + step):
        index = [slice(None)] * 3
        index[axis] = slice(k, k + 1)
        block = _outline_block(part, field, (index[0], index[1], index[2]))
        values.append(block.astype(np.float64).ravel())
    inner, outer = values
    inner, outer = inner[inner < 0], outer[inner < 0]
    return float((inner / (inner - outer)).max())


def column_support(outline: NDArray[np.int8]) -> NDArray[np.int8]:
    """The outline of part and support together, image order with layers going up.

    Below every place of the part stands support down to the tray. The field is the least of
    the part's own and of all that lies above it, so the two meet without a gap; where both
    claim a site the part wins.

    Parameters
    ----------
    outline : ndarray of int8, shape (layers, rows, columns)
        Negative inside the part.

    Returns
    -------
    ndarray of int8, same shape
        Negative inside part or support.
    """
    field = np.empty_like(outline)
    fill_columns(outline.__getitem__, field)
    return field


def fill_columns(outline: Callable[[int], NDArray[np.int8]], field: PlaneRow) -> None:
    """`column_support` plane by plane from the top, for designs of any size.

    Parameters
    ----------
    outline : callable
        Gives one plane of the part's outline field by its number, layers going up.
    field : PlaneRow
        Takes the planes of the field of part and support.
    """
    above: NDArray[np.int16] | None = None
    for k in reversed(range(field.shape[0])):
        own = outline(k).astype(np.int16)
        above = own if above is None else np.minimum(above, own)
        field[k] = np.minimum(own, np.minimum(above + CLEARANCE, 127)).astype(np.int8)

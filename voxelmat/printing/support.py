"""Outline fields for slicing, and the support that stands below overhangs."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.part import Part
from voxelmat.printing.place import Box

__all__ = ["CLEARANCE", "column_support", "outline_box", "outline_field", "outline_source"]

#: Support stays so far inside the overhang's outline, in 1/16 of the smallest voxel edge, so
#: that the rounding of the distance draws no skin of support along upright walls.
CLEARANCE = 2
_HALF_VOXEL = 8  # in the same steps


def outline_source(part: Part) -> str:
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
    printed = part.printed_labels()[part.labels]
    if part.distance is not None:
        outside = np.maximum(part.distance, np.int8(_HALF_VOXEL))
        return np.where(printed, part.distance, outside)
    if part.occupancy is not None:
        fill = np.where(printed, part.occupancy, 0).astype(np.int16)
        return (127 - fill).astype(np.int8)
    return np.where(printed, np.int8(-_HALF_VOXEL), np.int8(_HALF_VOXEL))


def outline_box(part: Part, field: NDArray[np.int8]) -> Box:
    """Low and high corner of the outline, part coordinates, mm.

    Exact for the outline as it is drawn: along one axis a linear interpolant takes its
    extremes in the columns of voxel centres.

    Raises
    ------
    InputError
        If nothing of the part would be printed.
    """
    stepped = part.distance is None and part.occupancy is None
    low, high = [], []
    for axis in range(3):
        lines = np.moveaxis(field, axis, 0)
        inside = np.asarray((lines < 0).any(axis=(1, 2)))
        if not inside.any():
            raise InputError(
                f"Part '{part.name}' has nothing to print: no voxel with a printed resin lies "
                "inside its outline."
            )
        first, last = int(inside.argmax()), len(inside) - 1 - int(inside[::-1].argmax())
        origin, spacing = part.grid.origin[axis], part.grid.spacing[axis]
        start = first - 0.5 if stepped or first == 0 else first - _reach(lines, first, -1)
        end = last + 0.5 if stepped or last == len(inside) - 1 else last + _reach(lines, last, 1)
        low.append(origin + (start + 0.5) * spacing)
        high.append(origin + (end + 0.5) * spacing)
    return ((low[0], low[1], low[2]), (high[0], high[1], high[2]))


def _reach(lines: NDArray[np.int8], at: int, step: int) -> float:
    """How far, in voxels, the outline reaches past the centres of plane `at`."""
    inner, outer = lines[at].astype(np.float64), lines[at + step].astype(np.float64)
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
    above = np.minimum.accumulate(outline[::-1], axis=0)[::-1].astype(np.int16)
    return np.minimum(outline, np.minimum(above + CLEARANCE, 127)).astype(np.int8)

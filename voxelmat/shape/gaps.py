"""Narrow gaps between two bodies, found by distance and given to one of them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.grid import VoxelGrid
from voxelmat.shape.bodies import GapRule
from voxelmat.shape.voxelise import BAND_SIXTEENTHS, VoxelShape
from voxelmat.units import number

__all__ = ["Gap", "find_gap", "slopes"]

#: Between two surfaces the directions away from them oppose; beside a joint they do not.
_OPPOSED = -0.9

Index = tuple[NDArray[np.intp], ...]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Gap:
    """Voxels that lie in a narrow gap.

    Attributes
    ----------
    at : three (n,) arrays of int
        i, j, k of the voxels.
    distance : (n,) int8
        Signed distance to the surface once the gap is closed, in 1/16 of the smallest
        spacing; negative.
    widest : float
        Widest place that is closed, mm.
    """

    at: Index
    distance: NDArray[np.int8]
    widest: float


def slopes(distance: NDArray[np.int8], at: Index, grid: VoxelGrid) -> NDArray[np.float64]:
    """Unit gradient (n, 3) of a distance field at some voxels, by central differences."""
    result = np.empty((len(at[0]), 3))
    for axis in range(3):
        ahead, behind = list(at), list(at)
        ahead[axis] = np.minimum(at[axis] + 1, grid.shape[axis] - 1)
        behind[axis] = np.maximum(at[axis] - 1, 0)
        run = (ahead[axis] - behind[axis]) * grid.spacing[axis]
        rise = distance[tuple(ahead)].astype(float) - distance[tuple(behind)].astype(float)
        result[:, axis] = np.divide(rise, run, out=np.zeros_like(rise), where=run > 0)
    length = np.linalg.norm(result, axis=1, keepdims=True)
    unit: NDArray[np.float64] = np.divide(
        result, length, out=np.zeros_like(result), where=length > 0
    )
    return unit


def find_gap(rule: GapRule, first: VoxelShape, second: VoxelShape, free: NDArray[np.bool_]) -> Gap:
    """Find where two bodies stand apart by less than a rule's width.

    A point lies in a gap of width g when its distances to the two bodies add up to g and
    point in opposite directions.

    Parameters
    ----------
    rule : GapRule
    first, second : VoxelShape
        On one grid.
    free : (nx, ny, nz) bool
        Voxels that are not full already.

    Raises
    ------
    InputError
        If the width is beyond the band in which distances are known.
    """
    unit = min(first.grid.spacing) / 16
    width = rule.width_mm / unit
    if width > BAND_SIXTEENTHS:
        raise InputError(
            f"Gaps of {number(rule.width_mm)} mm between '{rule.first}' and '{rule.second}' "
            "cannot be closed at this spacing: distances are known up to "
            f"{number(BAND_SIXTEENTHS * unit)} mm. Use a smaller width, larger voxels, or close "
            "the gap in the mesh."
        )
    apart = first.distance.astype(np.int16) + second.distance
    found = np.nonzero(free & (apart < width))
    away = slopes(first.distance, found, first.grid)
    toward = slopes(second.distance, found, first.grid)
    facing = np.einsum("ij,ij->i", away, toward) <= _OPPOSED
    at = (found[0][facing], found[1][facing], found[2][facing])
    gap = apart[at]
    closed = np.minimum(np.floor((gap - width) / 2), -1).astype(np.int8)
    return Gap(at=at, distance=closed, widest=float(gap.max(initial=0)) * unit)

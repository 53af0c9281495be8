"""Peak stresses that stand on the steps of the voxels, and the value beside them that does not.

The stress in one voxel of a stepped surface is not reliable, however fine the grid: it stands in
a re-entrant corner that the shape does not have. Leaving out the outermost layer of voxels gives
means that are within about 15 % where a member is more than 5 voxels thick (figure seen in the
abstract of published micro-finite-element work on bone, quoted from memory).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.fea.recover import von_mises
from voxelmat.fea.stress import judged
from voxelmat.model.part import Part
from voxelmat.model.result import StaticResult
from voxelmat.units import number

__all__ = ["Peak", "inner_voxels", "is_stepped", "peak_at", "peak_stresses", "staircase_cautions"]

Bools = NDArray[np.bool_]
Cell = tuple[int, int, int]


@dataclass(frozen=True, slots=True, kw_only=True)
class Peak:
    """Largest von Mises stress in one blend, at voxel centres.

    Attributes
    ----------
    label : int
        Palette entry.
    material : str
    value : float
        MPa.
    place_mm : tuple of float
    stepped : bool
        It stands on a stepped or re-entrant surface.
    filtered_mean, filtered_max : float
        Of the blend's voxels round it that are not at its surface, MPa; nan where there are none.
    filtered_voxels : int
    """

    label: int
    material: str
    value: float
    place_mm: tuple[float, float, float]
    stepped: bool
    filtered_mean: float
    filtered_max: float
    filtered_voxels: int

    @property
    def words(self) -> str:
        """What to make of a peak on steps."""
        x, y, z = self.place_mm
        text = (
            f"The largest von Mises stress in {self.material}, {number(self.value)} MPa near "
            f"({number(x)}, {number(y)}, {number(z)}) mm, stands on a stepped surface, where the "
            f"value of a single voxel is not reliable however fine the grid"
        )
        if math.isnan(self.filtered_mean):
            return f"{text}; the member is too thin there to leave its surface voxels out."
        return (
            f"{text}; without the surface voxels it is {number(self.filtered_mean)} MPa on "
            f"average and {number(self.filtered_max)} MPa at most round there."
        )


def is_stepped(part: Part, cell: Cell) -> bool:
    """Whether the surface is stepped or re-entrant within a voxel of `cell`."""
    at = tuple(slice(max(0, c - 1), c + 2) for c in cell)
    fill = np.asarray(part.fill[at])
    solid = fill > 0
    # A block has material wherever each of its three shadows has some.
    flat = np.ones_like(solid)
    for axis in range(3):
        others = tuple(a for a in range(3) if a != axis)
        flat &= solid.any(axis=others, keepdims=True)
    return bool(np.any(solid & (fill < 1)) or not np.array_equal(solid, flat))


def inner_voxels(part: Part) -> Bools:
    """Full voxels whose six neighbours are full and of the same label.

    The edge of the grid does not count as surface along an axis with a single layer.
    """
    full = part.solid & (part.fill >= 1.0)
    inner = full.copy()
    for axis, n in enumerate(part.grid.shape):
        if n == 1:
            continue
        m, lab = np.moveaxis(full, axis, 0), np.moveaxis(part.labels, axis, 0)
        same = m[1:] & m[:-1] & (lab[1:] == lab[:-1])
        edge = np.zeros((1, *m.shape[1:]), dtype=bool)
        joined = np.concatenate([edge, same]) & np.concatenate([same, edge])
        inner &= np.moveaxis(joined, 0, axis)
    return inner


def peak_at(result: StaticResult, cell: Cell, inner: Bools | None = None) -> Peak:
    """The von Mises stress in one voxel, and what the voxels round it say without the surface.

    Parameters
    ----------
    result : StaticResult
    cell : tuple of int
    inner : ndarray of bool, optional
        From `inner_voxels`, where it is at hand.
    """
    part = result.part
    inner = inner_voxels(part) if inner is None else inner
    label = int(part.labels[cell])
    near = tuple(slice(max(0, c - 2), c + 3) for c in cell)
    keep = inner[near] & (part.labels[near] == label)
    load = von_mises(result.stress[near].astype(np.float64))
    values = load[keep]
    x, y, z = (float(c[n]) for c, n in zip(part.grid.centres(), cell, strict=True))
    return Peak(
        label=label,
        material=str(part.palette[label]),
        value=float(von_mises(result.stress[cell].astype(np.float64))),
        place_mm=(x, y, z),
        stepped=is_stepped(part, cell),
        filtered_mean=float(values.mean()) if len(values) else math.nan,
        filtered_max=float(values.max()) if len(values) else math.nan,
        filtered_voxels=len(values),
    )


def peak_stresses(result: StaticResult) -> tuple[Peak, ...]:
    """The largest von Mises stress of each blend that occurs, largest first.

    The filtered values look at the 5 x 5 x 5 voxels round the peak.
    """
    part, load = result.part, result.von_mises
    seen = np.where(judged(part), part.labels, 0)
    inner = inner_voxels(part)
    found = []
    for label in np.unique(seen):
        if label == 0:
            continue
        top = int(np.argmax(np.where(seen == label, load, -1.0)))
        i, j, k = (int(n) for n in np.unravel_index(top, seen.shape))
        found.append(peak_at(result, (i, j, k), inner))
    return tuple(sorted(found, key=lambda p: -p.value))


def staircase_cautions(result: StaticResult) -> list[str]:
    """One sentence for the largest peak that stands on steps; none where no peak does."""
    stepped = [p for p in peak_stresses(result) if p.stepped]
    if not stepped:
        return []
    text = stepped[0].words
    if len(stepped) > 1:
        text = f"{text[:-1]}; the same goes for {len(stepped) - 1} more blends."
    return [text]

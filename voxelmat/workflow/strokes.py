"""Voxels that a brush went over, that hang together, or that hold one blend."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.blend import Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part

__all__ = ["connected", "holding", "stroked", "thinned_path"]

Bools = NDArray[np.bool_]
Doubles = NDArray[np.float64]
#: Fractions that differ by less count as the same blend.
_SAME = 1e-3


def stroked(
    grid: VoxelGrid, stroke: Mapping[str, Any], voxels: Bools
) -> tuple[Bools, NDArray[np.float64]]:
    """Voxels whose centre a brush covered, and how far along its path.

    A brush smaller than a voxel paints those in which the points of its path lie.

    Parameters
    ----------
    grid : VoxelGrid
    stroke : mapping
        ``brush``, its sizes, and ``path_mm``, as in the design file.
    voxels : ndarray of bool, shape (nx, ny, nz)
        Where the brush may paint.

    Returns
    -------
    tuple
        Covered voxels, and the share of the path's length at the nearest point of each, in index
        order.

    Raises
    ------
    InputError
        If the brush covered nothing.
    """
    path = np.asarray(stroke["path_mm"], dtype=np.float64)
    if len(path) == 1:
        path = np.repeat(path, 2, axis=0)
    length = np.linalg.norm(np.diff(path, axis=0), axis=1)
    ends = np.concatenate([[0.0], np.cumsum(length)]) / max(float(length.sum()), 1e-300)
    half = _half_size(stroke)
    best = np.full(grid.shape, np.inf)
    share = np.zeros(grid.shape)
    centres = grid.centres()
    for a, b, first, last in zip(path, path[1:], ends, ends[1:], strict=False):
        low, high = np.minimum(a, b) - half, np.maximum(a, b) + half
        box = tuple(
            slice(int(np.searchsorted(c, least)), int(np.searchsorted(c, most, side="right")))
            for c, least, most in zip(centres, low, high, strict=True)
        )
        at = np.meshgrid(*(c[s] for c, s in zip(centres, box, strict=True)), indexing="ij")
        distance, t = _from_segment(np.stack(at, axis=-1), a, b, stroke, half)
        closer = distance < best[box]
        best[box] = np.where(closer, distance, best[box])
        share[box] = np.where(closer, first + t * (last - first), share[box])
    covered = voxels & (best <= 1.0)
    if not covered.any():
        for point in path:
            cell = grid.index_of((float(point[0]), float(point[1]), float(point[2])))
            if cell is not None:
                covered[cell] = voxels[cell]
    if not covered.any():
        raise InputError(
            "The brush covered no voxel of the part; move its path, or take a larger brush."
        )
    return covered, share[covered]


def _half_size(stroke: Mapping[str, Any]) -> Doubles:
    """Half the extent of the brush along x, y, z, mm."""
    if stroke["brush"] == "box":
        return 0.5 * np.asarray(stroke["size_mm"], dtype=np.float64)
    half = np.full(3, float(stroke["radius_mm"]))
    if stroke["brush"] == "disc":
        half["xyz".index(stroke["axis"])] = 0.5 * stroke["depth_mm"]
    return half


def _from_segment(
    at: Doubles, a: Doubles, b: Doubles, stroke: Mapping[str, Any], half: Doubles
) -> tuple[Doubles, Doubles]:
    """Distance in units of the brush (at most 1 is covered), and where along the segment."""
    along = b - a
    size = float(along @ along)
    t = np.clip((at - a) @ along / size, 0.0, 1.0) if size > 0 else np.zeros(at.shape[:-1])
    gap = np.abs(at - (a + t[..., None] * along)) / half
    if stroke["brush"] == "box":
        return gap.max(axis=-1), t
    if stroke["brush"] == "disc":
        axis = "xyz".index(stroke["axis"])
        round_ = np.sqrt((np.delete(gap, axis, axis=-1) ** 2).sum(axis=-1))
        return np.maximum(round_, gap[..., axis]), t
    return np.sqrt((gap**2).sum(axis=-1)), t


def connected(part: Part, at_mm: Sequence[float], axis: str | None, voxels: Bools) -> Bools:
    """Voxels of one label that hang together with the one at a point, by faces.

    Parameters
    ----------
    part : Part
    at_mm : sequence of float
    axis : str or None
        Only within the slice across this axis.
    voxels : ndarray of bool, shape (nx, ny, nz)
        Where may be filled.

    Raises
    ------
    InputError
        If there is no such voxel at the point.
    """
    from scipy import ndimage

    cell = part.grid.index_of((at_mm[0], at_mm[1], at_mm[2]))
    if cell is None or not voxels[cell]:
        raise InputError(f"There is no printed voxel at {list(at_mm)} mm to fill from.")
    same = voxels & (part.labels == part.labels[cell])
    if axis is not None:
        plane = np.zeros_like(same)
        where: list[Any] = [slice(None)] * 3
        where["xyz".index(axis)] = cell["xyz".index(axis)]
        plane[tuple(where)] = True
        same &= plane
    pieces, _ = ndimage.label(same)
    return np.asarray(pieces == pieces[cell])


def holding(part: Part, blend: Blend) -> Bools:
    """Voxels that hold a blend.

    Raises
    ------
    InputError
        If there is none, saying what there is.
    """
    names = {n for b in (*part.palette, blend) for n, _ in b.fractions}
    match = [
        i > 0 and all(abs(b.fraction(n) - blend.fraction(n)) <= _SAME for n in names)
        for i, b in enumerate(part.palette)
    ]
    found = np.array(match)[part.labels]
    if not found.any():
        there = "; ".join(str(b) for b in part.palette[1:9])
        raise InputError(f"No voxel holds {blend}, so nothing is replaced. There is: {there}.")
    return np.asarray(found)


def thinned_path(path_mm: Sequence[Sequence[float]], within_mm: float) -> list[list[float]]:
    """A path with the points left out that lie within a distance of the rest.

    The method is that of D. H. Douglas and T. K. Peucker, Cartographica 10 (1973) 112 (from
    memory).
    """
    points = np.asarray(path_mm, dtype=np.float64)
    keep = np.zeros(len(points), dtype=bool)
    keep[[0, -1]] = True
    spans = [(0, len(points) - 1)]
    while spans:
        first, last = spans.pop()
        if last - first < 2:
            continue
        a, along = points[first], points[last] - points[first]
        size = float(along @ along)
        inner = points[first + 1 : last] - a
        t = np.clip(inner @ along / size, 0.0, 1.0) if size > 0 else np.zeros(len(inner))
        gap = np.linalg.norm(inner - t[:, None] * along, axis=1)
        far = int(gap.argmax())
        if gap[far] > within_mm:
            middle = first + 1 + far
            keep[middle] = True
            spans += [(first, middle), (middle, last)]
    return [[round(float(v), 4) for v in p] for p in points[keep]]

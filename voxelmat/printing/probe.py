"""Feelers into a stack: runs of solid along a line, and the outline of a section."""

from __future__ import annotations

import math
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from voxelmat.printing.view import PartView

__all__ = ["Run", "line_runs", "section_crossings"]

Array = NDArray[np.float64]
Triple = tuple[float, float, float]


@dataclass(frozen=True, slots=True)
class Run:
    """A stretch of a line that is solid, or empty, from end to end.

    Attributes
    ----------
    start, end : float
        Distance from the line's point along its direction, mm.
    solid : bool
    open : bool
        It reaches an end of the window.
    """

    start: float
    end: float
    solid: bool
    open: bool


def line_runs(view: PartView, point: Triple, direction: Array) -> list[Run]:
    """Runs of a line through the window, exact on the boundaries between sites.

    Parameters
    ----------
    view : PartView
    point : tuple of float
        Part coordinates, mm.
    direction : ndarray of float64, shape (3,)
        Of length 1.
    """
    start = view.to_pixels(np.array([point]))[0]
    along = view.to_pixels(np.array([np.array(point) + direction]))[0] - start
    along[np.abs(along) < 1e-9] = 0.0
    low, high = -math.inf, math.inf
    for m in range(3):
        if along[m] == 0:
            if not -0.5 <= start[m] < view.shape[m] - 0.5:
                return []
            continue
        ends = sorted(((-0.5 - start[m]) / along[m], (view.shape[m] - 0.5 - start[m]) / along[m]))
        low, high = max(low, ends[0]), min(high, ends[1])
    if low >= high:
        return []
    cuts = [np.array([low, high])]
    for m in range(3):
        if along[m] != 0:
            ends = sorted((start[m] + low * along[m], start[m] + high * along[m]))
            walls = np.arange(math.ceil(ends[0] - 0.5), math.floor(ends[1] - 0.5) + 1) + 0.5
            cuts.append((walls - start[m]) / along[m])
    t = np.unique(np.clip(np.concatenate(cuts), low, high))
    t = t[np.concatenate([[True], np.diff(t) > 1e-9])]
    sites = np.rint(start + np.outer(0.5 * (t[1:] + t[:-1]), along)).astype(np.int64)
    sites = np.clip(sites, 0, np.array(view.shape) - 1)
    solid = np.zeros(len(sites), dtype=np.bool_)
    for layer in np.unique(sites[:, 0]):
        on = sites[:, 0] == layer
        solid[on] = view.solid(int(layer))[sites[on, 1], sites[on, 2]]
    turns = np.flatnonzero(np.diff(solid.astype(np.int8))) + 1
    bounds = [0, *turns.tolist(), len(solid)]
    return [
        Run(float(t[a]), float(t[b]), bool(solid[a]), a == 0 or b == len(solid))
        for a, b in pairwise(bounds)
    ]


def section_crossings(
    view: PartView, point: Triple, axis: Array, reach: float
) -> tuple[Array, NDArray[np.bool_]]:
    """Outline of the section across `axis` at `point`, as points in its plane.

    Parameters
    ----------
    view : PartView
    point : tuple of float
        Part coordinates, mm.
    axis : ndarray of float64, shape (3,)
        Of length 1.
    reach : float
        How far round the point, mm.

    Returns
    -------
    points : ndarray of float64, shape (n, 2)
        Half way between the centres of a solid and an empty site, mm from `point`.
    inner : ndarray of bool, shape (n,)
        True where the solid site is the one nearer to `point`.
    """
    first = np.eye(3)[int(np.abs(axis).argmin())]
    u = np.cross(axis, first)
    u /= np.linalg.norm(u)
    v = np.cross(axis, u)
    thick = 0.5 * float(1 / np.abs(axis / view.pitch).max())
    corners = np.array(
        [np.array(point) + reach * (a * u + b * v) + c * thick * axis
         for a in (-1, 1) for b in (-1, 1) for c in (-1, 1)]
    )  # fmt: skip
    pixels = view.to_pixels(corners)
    low = np.floor(pixels.min(axis=0)).astype(int) - 1
    high = np.ceil(pixels.max(axis=0)).astype(int) + 2
    block = view.block(
        (int(low[0]), int(low[1]), int(low[2])), (int(high[0]), int(high[1]), int(high[2]))
    )
    found, ways = [], []
    for m in range(3):
        a = [slice(None)] * 3
        b = [slice(None)] * 3
        a[m], b[m] = slice(0, -1), slice(1, None)
        change = block[tuple(a)] != block[tuple(b)]
        at = np.argwhere(change).astype(np.float64)
        at[:, m] += 0.5
        found.append(at + low)
        ways.append(np.outer(np.where(block[tuple(a)][change], 1.0, -1.0), view.step[:, m]))
    off = view.to_part(np.concatenate(found)) - np.array(point)
    out = np.concatenate(ways)  # from the solid site to the empty one
    # Half a site to one side only, so that a section through site centres takes one layer of them.
    inside = (off @ axis >= -thick - 1e-9) & (off @ axis < thick - 1e-9)
    inside &= np.hypot(off @ u, off @ v) <= reach
    off, out = off[inside], out[inside]
    inner = (off @ u) * (out @ u) + (off @ v) * (out @ v) > 0
    return np.column_stack([off @ u, off @ v]), np.asarray(inner)

"""Connected pieces of a periodic grid, and along how many directions each goes on for ever."""

from __future__ import annotations

import itertools

import numpy as np
import scipy.ndimage
from numpy.typing import NDArray

from voxelmat.fea.fold import Periodic, array_axes, is_image, wrap

__all__ = ["node_groups", "periodic_pieces", "voxels_at"]

Bools = NDArray[np.bool_]
Labels = NDArray[np.integer]


def _steps(by_nodes: bool) -> list[tuple[int, ...]]:
    """One of each pair of opposite steps to a neighbour, along z, y, x."""
    steps = [s for s in itertools.product((-1, 0, 1), repeat=3) if s > (0, 0, 0)]
    return steps if by_nodes else [s for s in steps if sum(map(abs, s)) == 1]


def _ranges(step: int, size: int) -> list[tuple[slice, slice, int]]:
    """(from, to, cells crossed) along one axis for a step of -1, 0 or 1."""
    if step == 0:
        return [(slice(None), slice(None), 0)]
    inner, outer = (slice(0, size - 1), slice(1, size)), (slice(size - 1, size), slice(0, 1))
    if step < 0:
        inner, outer = inner[::-1], outer[::-1]
    return [(*inner, 0), (*outer, step)]


def _links(labels: Labels, periodic: Periodic, by_nodes: bool) -> NDArray[np.int64]:
    """Rows (piece, piece, cells crossed along z, y, x) for neighbours across a cell's faces."""
    wraps = periodic[::-1]
    rows = []
    for step in _steps(by_nodes):
        ranges = [_ranges(s, n) for s, n in zip(step, labels.shape, strict=True)]
        for way in itertools.product(*ranges):
            crossed = tuple(w[2] for w in way)
            if not any(crossed) or any(c and not p for c, p in zip(crossed, wraps, strict=True)):
                continue
            a, b = labels[tuple(w[0] for w in way)], labels[tuple(w[1] for w in way)]
            both = (a > 0) & (b > 0)
            pairs = np.unique(np.stack([a[both], b[both]], axis=1), axis=0)
            rows.append(np.column_stack([pairs, np.tile(crossed, (len(pairs), 1))]))
    return np.concatenate(rows).astype(np.int64) if rows else np.zeros((0, 5), dtype=np.int64)


def periodic_pieces(
    solid: Bools, periodic: Periodic, *, by_nodes: bool = False
) -> tuple[NDArray[np.int32], NDArray[np.int64]]:
    """Label the pieces of a periodic grid.

    Parameters
    ----------
    solid : ndarray of bool, shape (nz, ny, nx)
    periodic : tuple of bool
        Along x, y, z.
    by_nodes : bool
        Join voxels that share a node; otherwise only those that share a face.

    Returns
    -------
    labels : ndarray of int32, shape of `solid`
        1 and up; 0 where nothing is.
    ranks : ndarray, shape (pieces + 1,)
        Of each label: 0 for an island, 1 for an endless fibre, 2 for a sheet, 3 for a piece that
        reaches its own copies in every direction. Entry 0 stands for nothing.
    """
    structure = np.ones((3, 3, 3)) if by_nodes else None
    labels, count = scipy.ndimage.label(solid, structure)
    near: list[list[tuple[int, NDArray[np.int64]]]] = [[] for _ in range(count + 1)]
    for a, b, *crossed in _links(labels, periodic, by_nodes):
        near[a].append((int(b), np.array(crossed)))
        near[b].append((int(a), -np.array(crossed)))
    merged, ranks = np.zeros(count + 1, dtype=np.int32), [0]
    cell: dict[int, NDArray[np.int64]] = {}
    for start in range(1, count + 1):
        if merged[start]:
            continue
        merged[start] = len(ranks)
        cell[start] = np.zeros(3, dtype=np.int64)
        loops, todo = [np.zeros(3, dtype=np.int64)], [start]
        while todo:
            a = todo.pop()
            for b, crossed in near[a]:
                if merged[b]:
                    loops.append(cell[a] + crossed - cell[b])
                else:
                    merged[b], cell[b] = len(ranks), cell[a] + crossed
                    todo.append(b)
        ranks.append(int(np.linalg.matrix_rank(np.array(loops))))
    return merged[labels], np.array(ranks)


def _corners(shape: tuple[int, ...]) -> list[tuple[slice, ...]]:
    """Where the nodes at each of the 8 corners of all voxels lie among the nodes."""
    offsets = ((a >> 2, a >> 1 & 1, a & 1) for a in range(8))
    return [tuple(slice(o, o + n) for o, n in zip(at, shape, strict=True)) for at in offsets]


def node_groups(solid: Bools, periodic: Periodic) -> NDArray[np.int32]:
    """Number of the piece, joined by nodes, that each node belongs to.

    Returns
    -------
    ndarray of int32, shape (nz+1, ny+1, nx+1)
        0 where no solid voxel touches, and on last planes that are copies.
    """
    labels, _ = periodic_pieces(solid, periodic, by_nodes=True)
    out = np.zeros(tuple(n + 1 for n in solid.shape), dtype=np.int32)
    for at in _corners(solid.shape):
        np.maximum(out[at], labels, out=out[at])
    axes = array_axes(periodic)
    for axis in axes:
        ends = np.moveaxis(out, axis, 0)
        np.maximum(ends[0], ends[-1], out=ends[0])
    out[is_image(out.shape, axes)] = 0
    return out


def voxels_at(nodes: Bools, periodic: Periodic) -> Bools:
    """Voxels ``[k, j, i]`` that touch one of these nodes; copies follow their originals."""
    nodes = nodes.copy()
    wrap(nodes, array_axes(periodic))
    shape = tuple(n - 1 for n in nodes.shape)
    return np.asarray(np.any([nodes[at] for at in _corners(shape)], axis=0))

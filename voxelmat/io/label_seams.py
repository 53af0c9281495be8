"""Finds edges of the voxel grid along which a label touches only itself, and who gets them."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

__all__ = ["Seams", "find_seams", "octants"]

Labels = NDArray[np.uint16]
_BATCH = 20_000  # knots judged at a time


@dataclass(frozen=True, slots=True, eq=False)
class Seams:
    """Mended edges and the nodes where they end.

    Attributes
    ----------
    edges : tuple of ndarray of uint16, one an axis
        Indexed by the node where the edge starts: the label that is given the edge, 0 for none.
    dirty : ndarray of bool, on nodes
        Nodes where a mended edge ends.
    knots : ndarray of uint16
        The label of the small cube at each dirty node, in the order of ``argwhere(dirty)``.
    touching, mended : int
        Edges along which a label touches only itself; edges given away in all.
    """

    edges: tuple[Labels, Labels, Labels]
    dirty: NDArray[np.bool_]
    knots: Labels
    touching: int
    mended: int

    def arms(self, nodes: NDArray[np.int64]) -> Labels:
        """Labels of the mended edges at nodes, (n, axis, low or high side); 0 for none."""
        return _arms(self.edges, nodes)


def _arms(edges: tuple[Labels, ...], nodes: NDArray[np.int64]) -> Labels:
    out = np.zeros((len(nodes), 3, 2), dtype=np.uint16)
    for axis in range(3):
        for side in (0, 1):
            start = nodes.copy()
            start[:, axis] += side - 1
            inside = (start[:, axis] >= 0) & (start[:, axis] < edges[axis].shape[axis] - 1)
            out[inside, axis, side] = edges[axis][tuple(start[inside].T)]
    return out


def octants(padded: Labels, nodes: NDArray[np.int64]) -> Labels:
    """The eight labels round each node, (n, 2, 2, 2); low side first."""
    out = np.zeros((len(nodes), 2, 2, 2), dtype=np.uint16)
    for a, b, c in np.ndindex(2, 2, 2):
        out[:, a, b, c] = padded[tuple((nodes + np.array([a, b, c])).T)]
    return out


def _touching(a: Any, b: Any, c: Any, d: Any) -> Any:
    """The label of cells a, d (or b, c) that meet across an edge only; 0 where none do."""
    one = np.where((a == d) & (b != a) & (c != a), a, 0)
    two = np.where((b == c) & (a != b) & (d != b), b, 0)
    both = (one > 0) & (two > 0)
    return np.where(both, np.minimum(one, two), np.maximum(one, two))


def find_seams(padded: Labels) -> Seams:
    """Find them.

    Parameters
    ----------
    padded : ndarray of uint16
        Labels with one empty voxel round them.
    """
    edges = (_touched(padded, 0), _touched(padded, 1), _touched(padded, 2))
    touching = sum(int((e > 0).sum()) for e in edges)
    while True:
        dirty = _ends(edges)
        where = np.argwhere(dirty)
        knots = np.zeros(len(where), dtype=np.uint16)
        bad = np.zeros(len(where), dtype=bool)
        for first in range(0, len(where), _BATCH):
            some = slice(first, first + _BATCH)
            knots[some], bad[some] = _knots(padded, edges, where[some])
        if not bad.any():
            mended = sum(int((e > 0).sum()) for e in edges)
            return Seams(edges, dirty, knots, touching, mended)
        # With all edges at a node given to one label, its cube of that label always does. Labels
        # of edges only rise, so this comes to an end.
        for node in where[bad]:
            _give_all(edges, node)


def _touched(padded: Labels, axis: int) -> Labels:
    """The label of each edge along `axis` that is to be mended, 0 for the others; on nodes."""
    u, v = (axis + 1) % 3, (axis + 2) % 3
    cells = []
    for a, b in ((0, 0), (1, 0), (0, 1), (1, 1)):
        where = [slice(1, -1)] * 3
        where[u] = slice(a, padded.shape[u] - 1 + a)
        where[v] = slice(b, padded.shape[v] - 1 + b)
        cells.append(padded[tuple(where)])
    found = np.zeros([n - 1 for n in padded.shape], dtype=np.uint16)
    found[tuple(slice(0, -1) if a == axis else slice(None) for a in range(3))] = _touching(*cells)
    return found


def _ends(edges: tuple[Labels, Labels, Labels]) -> NDArray[np.bool_]:
    """Nodes where a mended edge ends."""
    dirty = np.zeros(edges[0].shape, dtype=bool)
    for axis, found in enumerate(edges):
        dirty |= found > 0
        start = tuple(slice(0, -1) if a == axis else slice(None) for a in range(3))
        end = tuple(slice(1, None) if a == axis else slice(None) for a in range(3))
        dirty[end] |= found[start] > 0
    return dirty


def _give_all(edges: tuple[Labels, Labels, Labels], node: NDArray[np.int64]) -> None:
    """Give every edge at a node to the highest label that one of them has."""
    label = _arms(edges, node[None]).max()
    for axis in range(3):
        for side in (0, 1):
            start = node.copy()
            start[axis] += side - 1
            if 0 <= start[axis] < edges[axis].shape[axis] - 1:
                edges[axis][tuple(start)] = label


def _knots(
    padded: Labels, edges: tuple[Labels, ...], nodes: NDArray[np.int64]
) -> tuple[Labels, NDArray[np.bool_]]:
    """For each node a label with which no edge of its small cube has four faces; none: True."""
    around, arms = octants(padded, nodes), _arms(edges, nodes)
    block = around.repeat(2, axis=1).repeat(2, axis=2).repeat(2, axis=3)
    for axis in range(3):
        for side in (0, 1):
            where: list[Any] = [slice(None), slice(1, 3), slice(1, 3), slice(1, 3)]
            where[axis + 1] = slice(3, 4) if side else slice(0, 1)
            arm = arms[:, axis, side][:, None, None, None]
            block[tuple(where)] = np.where(arm > 0, arm, block[tuple(where)])
    candidates = np.concatenate((arms.reshape(-1, 6), around.reshape(-1, 8)), axis=1)
    chosen = arms.reshape(-1, 6).max(axis=1)
    open_ = np.ones(len(nodes), dtype=bool)
    for column in range(candidates.shape[1]):
        trial = candidates[:, column]
        block[:, 1:3, 1:3, 1:3] = trial[:, None, None, None]
        good = open_ & (trial > 0) & ~_has_touching(block)
        chosen[good] = trial[good]
        open_ &= ~good
    return chosen.astype(np.uint16), open_


def _has_touching(block: Labels) -> NDArray[np.bool_]:
    """Does any label touch only itself along an inner edge of the (n, 4, 4, 4) cells?"""
    found = np.zeros(len(block), dtype=bool)
    for axis in (1, 2, 3):
        cells = np.moveaxis(block, axis, 1)
        four = [cells[:, :, a : 3 + a, b : 3 + b] for a, b in ((0, 0), (1, 0), (0, 1), (1, 1))]
        found |= (_touching(*four) > 0).any(axis=(1, 2, 3))
    return found

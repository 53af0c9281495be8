"""Trees over triangles, of boxes or of discs, so that kernels find near ones fast."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["LEAF", "TriangleTree", "box_tree", "disc_tree"]

LEAF = 2  # triangles a leaf: fewer means more nodes, more means more triangle tests


@dataclass(frozen=True, slots=True, kw_only=True)
class TriangleTree:
    """A complete binary tree, root first; children of node n are 2 n + 1 and 2 n + 2.

    Attributes
    ----------
    nodes : (2 * leaves - 1, 6 or 8) float64
        Boxes: low and high corner; nodes that hold nothing are inside out. Discs: centre,
        axis, half thickness, radius; nodes that hold nothing are far away.
    order : (m,) int64
        Triangle numbers as they stand in the leaves, `LEAF` a leaf.
    """

    nodes: NDArray[np.float64]
    order: NDArray[np.int64]


def _leaves(m: int) -> int:
    """Leaves of a complete tree for m triangles: a power of two."""
    leaves = 1
    while leaves * LEAF < m:
        leaves *= 2
    return leaves


def _halved(corners: NDArray[np.float64]) -> NDArray[np.int64]:
    """Order triangles so that each half of each run lies on one side of a cut.

    Every run is cut across the longest edge of the box round its triangles' middles, at
    the median, all runs of a level at once.
    """
    m = len(corners)
    leaves = _leaves(m)
    middle = np.full((leaves * LEAF, 3), np.inf)
    middle[:m] = corners.mean(axis=1)
    order = np.arange(leaves * LEAF)
    runs = 1
    while runs < leaves:
        rows = order.reshape(runs, -1)
        points = middle[rows]
        high = np.where(np.isinf(points), -np.inf, points).max(axis=1)
        high = np.where(np.isinf(high), 0.0, high)  # runs of padding only: any axis will do
        longest = (high - np.minimum(points.min(axis=1), high)).argmax(axis=1)
        key = np.take_along_axis(points, longest[:, None, None], axis=2)[:, :, 0]
        half = rows.shape[1] // 2
        # Padding is infinite, so it collects at the end of the order.
        chosen = np.argpartition(key, half - 1, axis=1)
        order = np.take_along_axis(rows, chosen, axis=1).ravel()
        runs *= 2
    return order[order < m]


def box_tree(corners: NDArray[np.float64]) -> TriangleTree:
    """Build a tree of bounding boxes over (m, 3, 3) triangle corners, m at least 1."""
    order = _halved(corners)
    leaves = _leaves(len(order))
    boxes = np.empty((2 * leaves - 1, 6))
    boxes[:, :3] = np.inf
    boxes[:, 3:] = -np.inf
    starts = np.arange(0, len(order), LEAF)
    filled = slice(leaves - 1, leaves - 1 + len(starts))
    boxes[filled, :3] = np.minimum.reduceat(corners.min(axis=1)[order], starts, axis=0)
    boxes[filled, 3:] = np.maximum.reduceat(corners.max(axis=1)[order], starts, axis=0)
    width = leaves // 2
    while width >= 1:
        children = boxes[2 * width - 1 : 4 * width - 1].reshape(width, 2, 6)
        boxes[width - 1 : 2 * width - 1, :3] = children[:, :, :3].min(axis=1)
        boxes[width - 1 : 2 * width - 1, 3:] = children[:, :, 3:].max(axis=1)
        width //= 2
    return TriangleTree(nodes=boxes, order=order)


def disc_tree(corners: NDArray[np.float64]) -> TriangleTree:
    """Build a tree of thick discs over (m, 3, 3) triangle corners, m at least 1.

    A disc along the surface hugs a patch of it far closer than a box does, so that a
    search for the nearest triangle looks at few that are not.
    """
    from voxelmat.kernels.nearest import fit_discs

    order = _halved(corners)
    leaves = _leaves(len(order))
    discs = np.empty((2 * leaves - 1, 8))
    # Rounding must not put a triangle outside its disc.
    fit_discs(corners[order], leaves, LEAF, 1e-8 * (float(np.abs(corners).max()) + 1.0), discs)
    return TriangleTree(nodes=discs, order=order)

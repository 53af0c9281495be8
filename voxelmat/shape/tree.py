"""A tree of bounding boxes over triangles, so that kernels find near ones fast."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["BoxTree", "box_tree"]

LEAF = 2


@dataclass(frozen=True, slots=True, kw_only=True)
class BoxTree:
    """A complete binary tree, root first; children of node n are 2 n + 1 and 2 n + 2.

    Attributes
    ----------
    boxes : (2 * leaves - 1, 6) float64
        Low and high corner of each node; leaves that hold nothing are inside out.
    order : (m,) int64
        Triangle numbers as they stand in the leaves, `LEAF` a leaf.
    """

    boxes: NDArray[np.float64]
    order: NDArray[np.int64]


def _spread(bits: NDArray[np.uint64]) -> NDArray[np.uint64]:
    """Put two zero bits between the 21 low bits of each number."""
    x = bits
    for shift, mask in (
        (32, 0x1F00000000FFFF),
        (16, 0x1F0000FF0000FF),
        (8, 0x100F00F00F00F00F),
        (4, 0x10C30C30C30C30C3),
        (2, 0x1249249249249249),
    ):
        x = (x | (x << np.uint64(shift))) & np.uint64(mask)
    return x


def box_tree(corners: NDArray[np.float64]) -> BoxTree:
    """Build the tree over (m, 3, 3) triangle corners, m at least 1.

    Triangles are sorted along a Morton curve through their middles (Morton 1966, IBM
    report), which keeps near ones together without a recursive split.
    """
    middle = corners.mean(axis=1)
    low = middle.min(axis=0)
    extent = max(float((middle.max(axis=0) - low).max()), 1e-300)
    cell = ((middle - low) / extent * (2**21 - 1)).astype(np.uint64)
    x, y, z = (_spread(cell[:, a]) for a in range(3))
    order = np.argsort(x | (y << np.uint64(1)) | (z << np.uint64(2)), kind="stable")
    leaves = 1
    while leaves * LEAF < len(order):
        leaves *= 2
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
    return BoxTree(boxes=boxes, order=order)

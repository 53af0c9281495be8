"""Periodic directions on a grid that keeps both end planes of nodes: wrap, fold, the operator.

Along a periodic axis the last plane of nodes is the first one again. It stays in the arrays, so
that every kernel for a plain grid serves here too, and holds no unknown: values are copied to it
before a product (`wrap`), and what a product leaves there is added to the first plane after it
(`fold`).
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.fea.operator import Stiffness

__all__ = ["PeriodicStiffness", "array_axes", "fold", "is_image", "wrap"]

Periodic = tuple[bool, bool, bool]


def array_axes(periodic: Periodic) -> tuple[int, ...]:
    """Axes of a field ``[..., k, j, i]`` that are periodic, for flags along x, y, z."""
    return tuple(-1 - d for d in range(3) if periodic[d])


def _ends(a: NDArray[Any], axis: int) -> tuple[NDArray[Any], NDArray[Any]]:
    moved = np.moveaxis(a, axis, 0)
    return moved[0], moved[-1]


def wrap(a: NDArray[Any], axes: tuple[int, ...]) -> None:
    """Copy the first plane to the last along each of `axes`, in place."""
    for axis in axes:
        first, last = _ends(a, axis)
        last[...] = first


def fold(a: NDArray[Any], axes: tuple[int, ...]) -> None:
    """Add the last plane to the first along each of `axes` and clear it, in place."""
    for axis in axes:
        first, last = _ends(a, axis)
        first += last
        last[...] = 0


def is_image(shape: tuple[int, ...], axes: tuple[int, ...]) -> NDArray[np.bool_]:
    """Nodes ``[k, j, i]`` that are copies of others."""
    out = np.zeros(shape, dtype=bool)
    for axis in axes:
        _ends(out, axis)[1][...] = True
    return out


class PeriodicStiffness(Stiffness):
    """K of a periodic grid as a product; see `Stiffness` for the parameters.

    `apply` sets the last planes of its argument, and leaves 0 on those of the product.
    """

    def __init__(self, *args: Any, axes: tuple[int, ...]) -> None:
        super().__init__(*args)
        self.axes = axes

    def apply(self, u: NDArray[Any], y: NDArray[Any]) -> None:
        """Write K u to y."""
        wrap(u, self.axes)
        self.apply_open(u, y)
        fold(y, self.axes)

    def apply_open(self, u: NDArray[Any], y: NDArray[Any]) -> None:
        """The product of the open grid: last planes count as nodes of their own."""
        super().apply(u, y)

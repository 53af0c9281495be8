"""Walls and gaps under a minimum, screened while the layers of a stack stream by.

A site is thin where no cube of the minimum size fits into the solid (or, for gaps, into the
empty space) within one and a half minimum sizes of it. So nothing thinner than the minimum is
missed by more than one site, a wall that stands oblique to the axes may be named up to 1.7 times
the minimum (the cube's diagonal), and edges, roundings and ribs lower than the minimum pass.
"""

from __future__ import annotations

from collections import deque

import numpy as np
from numpy.typing import NDArray

from voxelmat.kernels.bitplane import dilate_columns, dilate_rows

__all__ = ["ThinScreen"]

Plane = NDArray[np.uint64]
_FULL = np.uint64(0xFFFFFFFFFFFFFFFF)


class _LayerWindow:
    """OR of the last `size` planes, by doubling; before the first plane lies `edge`."""

    def __init__(self, size: int, edge: Plane) -> None:
        self._steps = []
        span = 1
        while span < size:
            step = min(span, size - span)
            self._steps.append(step)
            span += step
        self._history = [deque([edge] * step, maxlen=step) for step in self._steps]

    def push(self, plane: Plane) -> Plane:
        for history in self._history:
            earlier = history[0]
            history.append(plane)
            plane = plane | earlier
        return plane


class ThinScreen:
    """Feed layers from the tray upwards; each `push` may give back the thin sites of one.

    Parameters
    ----------
    rows, width : int
        Size of a layer in sites.
    sites : tuple of int
        Edge of the smallest cube along layers, rows and columns, in sites, at least 1.
    solid : bool
        Screen what is set (walls); what is not set (gaps) where False.
    """

    def __init__(self, rows: int, width: int, sites: tuple[int, int, int], *, solid: bool) -> None:
        words = (width + 63) // 64
        self._valid = np.full(words, _FULL)
        self._valid[-1] = (2**64 - 1 << (words * 64 - width)) & (2**64 - 1)
        self._solid = solid
        self._erode = sites
        self._dilate = tuple(2 * -(-3 * n // 2) + 1 for n in sites)
        # The eroded field is the complement of the dilated complement.
        self._other_edge = _FULL if solid else np.uint64(0)
        self._core_edge = ~self._other_edge
        self._blank = np.full((rows, words), np.uint64(0) if solid else _FULL)
        self._others = _LayerWindow(sites[0], ~self._blank)
        self._cores = _LayerWindow(self._dilate[0], self._blank)
        self._wait = (sites[0] // 2, self._dilate[0] // 2)
        self._layers: deque[Plane] = deque()
        self._pushed = 0

    def _spread(self, plane: Plane, size: tuple[int, ...], edge: np.uint64) -> Plane:
        """OR over a window of rows and columns, as centred as its size allows."""
        rows, out = np.empty_like(plane), np.empty_like(plane)
        dilate_rows(plane, (size[2] - 1) // 2, size[2] // 2, edge, rows)
        dilate_columns(rows, (size[1] - 1) // 2, size[1] // 2, edge, out)
        return out

    def push(self, plane: Plane) -> Plane | None:
        """The thin sites of the layer that is `delay` layers back, once there is one.

        Parameters
        ----------
        plane : ndarray of uint64, shape (rows, words)
            The solid sites; bits past the true width are 0.
        """
        self._layers.append(plane if self._solid else ~plane)
        return self._advance(~plane if self._solid else plane)

    def _advance(self, other: Plane) -> Plane | None:
        core = ~self._near_other(other)
        self._pushed += 1
        if self._pushed <= self._wait[0]:
            return None
        near = self._cores.push(self._spread(core, self._dilate, self._core_edge))
        if self._pushed <= sum(self._wait):
            return None
        return self._layers.popleft() & ~near & self._valid

    def _near_other(self, other: Plane) -> Plane:
        """Sites that a cube round them would reach `other` from, ``size // 2`` layers back."""
        return self._others.push(self._spread(other, self._erode, self._other_edge))

    @property
    def delay(self) -> int:
        """Layers that a result lags behind."""
        return sum(self._wait)

    def finish(self) -> list[Plane]:
        """The thin sites of the layers that are still waiting; above the last lies nothing."""
        rest = []
        while self._layers:
            thin = self._advance(~self._blank)
            if thin is not None:
                rest.append(thin)
        return rest

"""Features under a minimum in 3-D thickness, screened while the layers of a stack stream by.

Local thickness is the diameter of the largest ball that lies in the solid and holds the point
(Hildebrand and Ruegsegger, J. Microscopy 185, 1997). A site is thin where no ball of the minimum
diameter (an ellipsoid, where the minimum differs by axis) has its centre within one and a half
minimum sizes, so that edges, roundings, wedges down to 40 degrees and ribs lower than the minimum
pass. Balls are sets of whole sites: what is found is measured before it is named.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.kernels.ballspread import spread_ball
from voxelmat.kernels.bitplane import dilate_rows, to_words
from voxelmat.printing.thin import ThinScreen

__all__ = ["BallScreen", "packed", "thin_sites"]

Plane = NDArray[np.uint64]
_FULL = np.uint64(0xFFFFFFFFFFFFFFFF)


def _span(size: int) -> NDArray[np.int64]:
    """Offsets of `size` sites, as centred as it allows."""
    return np.arange(-((size - 1) // 2), size // 2 + 1)


def _ball(size: tuple[int, int, int]) -> NDArray[np.int64]:
    """Sites along columns in each row of a ball, ``[layer, row]``; its centre is that of `_span`.

    A site belongs to the ball where its centre does.
    """
    square = [((_span(n) - _span(n).mean()) / (n / 2)) ** 2 for n in size[:2]]
    rest = 1 - square[0][:, None] - square[1][None, :]
    half = size[2] / 2 * np.sqrt(np.clip(rest, 0, None)) + 1e-9
    odd = size[2] % 2
    count = 2 * np.floor(half + (0.0 if odd else 0.5)).astype(np.int64) + (1 if odd else 0)
    return np.asarray(np.where(rest < -1e-12, 0, np.minimum(count, size[2])), np.int64)


class _BallSpread:
    """OR of the planes within a ball, ``size[0] // 2`` layers late."""

    def __init__(self, size: tuple[int, int, int], edge: np.uint64, blank: Plane) -> None:
        count = _ball(size)
        self._widths = np.unique(count[count > 0])
        level = np.searchsorted(self._widths, count)
        self._level = np.where(count > 0, level, -1).astype(np.int64)
        self._first_row = int(_span(size[1])[0])
        self._edge = edge
        self._ring = np.zeros((size[0], *blank.shape), np.uint64)
        self._wide = np.empty((len(self._widths), *blank.shape), np.uint64)
        self._newest = 0
        outside = np.full_like(blank, edge)
        for _ in range(size[0]):
            self.push(outside)

    def push(self, plane: Plane) -> Plane:
        self._newest = (self._newest + 1) % len(self._ring)
        self._ring[self._newest] = 0
        for width, out in zip(self._widths, self._wide, strict=True):
            dilate_rows(plane, int(width - 1) // 2, int(width) // 2, self._edge, out)
        spread_ball(self._wide, self._level, self._first_row, self._edge, self._ring, self._newest)
        oldest: Plane = self._ring[(self._newest + 1) % len(self._ring)]
        return oldest


class BallScreen(ThinScreen):
    """A `ThinScreen` with a ball in place of the cube; the same arguments and use."""

    def __init__(self, rows: int, width: int, sites: tuple[int, int, int], *, solid: bool) -> None:
        super().__init__(rows, width, sites, solid=solid)
        self._ball = _BallSpread(sites, self._other_edge, self._blank)

    def _near_other(self, other: Plane) -> Plane:
        return self._ball.push(other).copy()


def packed(plane: NDArray[np.bool_]) -> Plane:
    """A plane ``[row, column]`` as words, the first column in the highest bit."""
    bits = np.packbits(plane, axis=1)
    words = np.empty((bits.shape[0], (bits.shape[1] + 7) // 8), dtype=np.uint64)
    to_words(bits, words)
    return words


def thin_sites(block: NDArray[np.bool_], size: tuple[int, int, int]) -> NDArray[np.bool_]:
    """Sites of a block ``[layer, row, column]`` near which no ball of `size` sites fits.

    Parameters
    ----------
    block : ndarray of bool
        Beyond it nothing is set.
    size : tuple of int
        Diameters along layers, rows and columns.
    """
    width = block.shape[2]
    screen = BallScreen(block.shape[1], width, size, solid=True)
    pushed = [screen.push(packed(plane)) for plane in block]
    found = [thin for thin in pushed if thin is not None] + screen.finish()
    bits = np.stack(found).astype(">u8").view(np.uint8)
    return np.unpackbits(bits, axis=2, count=width).astype(np.bool_)

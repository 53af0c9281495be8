"""Which channel's images, moved by a few sites, would fit the others again."""

from __future__ import annotations

import itertools

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from voxelmat.printing.readback import Stack

__all__ = ["shifted_channel"]

_REACH = 3  # sites that are tried either way
#: Rows and columns that a channel is moved by, the smallest move first.
_MOVES = sorted(
    (m for m in itertools.product(range(-_REACH, _REACH + 1), repeat=2) if any(m)),
    key=lambda m: (abs(m[0]) + abs(m[1]), m),
)
_CROP = 96  # sites round the first conflict that are looked at


def _conflict(claims: NDArray[np.int64]) -> int:
    """Sites claimed more than once, and narrow slits that no one claims."""
    both = claims > 0
    slits = np.zeros_like(both)
    for line in ((1, 2 * _REACH + 1), (2 * _REACH + 1, 1)):  # along rows, along columns
        slits |= ndimage.binary_closing(both, np.ones(line, dtype=np.bool_)) & ~both
    inner = slice(2 * _REACH, -2 * _REACH)
    return int((claims > 1)[inner, inner].sum() + slits[inner, inner].sum())


def shifted_channel(stack: Stack, place: tuple[int, int, int]) -> tuple[str, int, int] | None:
    """Find the one channel whose shift explains the conflicts at `place`.

    Parameters
    ----------
    stack : Stack
    place : tuple of int
        Layer, row and column of a site that two channels claim.

    Returns
    -------
    tuple or None
        Channel name and the rows and columns to move its images by; None where no single shift
        of up to three sites removes nine tenths of the conflicts.
    """
    layer, row, column = place
    width = stack.raster.image_shape[2]
    rows = slice(max(0, row - _CROP), row + _CROP)
    columns = slice(max(0, column - _CROP), column + _CROP)
    read = stack.files.examine(layer)
    if read.bad:
        return None
    planes = [
        np.unpackbits(bits, axis=1, count=width)[rows, columns].astype(bool) for bits in read.bits
    ]
    margin = 2 * _REACH + 1
    padded = [np.pad(p, margin).astype(np.int64) for p in planes]
    everything = np.sum(padded, axis=0)
    best: tuple[int, str, int, int] | None = None
    start = _conflict(everything)
    for channel, plane in enumerate(padded):
        others = everything - plane
        for dy, dx in _MOVES:
            left = _conflict(others + np.roll(plane, (dy, dx), axis=(0, 1)))
            if best is None or left < best[0]:
                best = (left, stack.channels[channel].name, dy, dx)
    if best is None or best[0] > start / 10:
        return None
    return best[1:]

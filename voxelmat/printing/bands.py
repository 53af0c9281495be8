"""Screens for thin features that run on bands of rows, so that their memory is bounded."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from voxelmat.printing.pieces import Piece, Pieces

__all__ = ["Band", "Screen", "split_rows"]

Plane = NDArray[np.uint64]


class Screen(Protocol):
    """Is fed layers from the tray upwards and gives back flagged sites, some layers later."""

    def push(self, plane: Plane) -> Plane | None:
        """Take in a layer."""

    def finish(self) -> list[Plane]:
        """What is still to come."""


class Band:
    """Screens on a band of rows and the rows beside it that they depend on.

    Parameters
    ----------
    inner : tuple of int
        First row, and the one after the last.
    shape : tuple of int
        Rows and columns of a layer.
    reach : int
        Rows to either side that decide whether a site is flagged.
    screens : callable
        Makes the screens for so many rows.
    """

    def __init__(
        self,
        inner: tuple[int, int],
        shape: tuple[int, int],
        reach: int,
        screens: Callable[[int], Sequence[Screen]],
    ) -> None:
        rows, width = shape
        self._first = inner[0]
        self._rows = slice(max(0, inner[0] - reach), min(rows, inner[1] + reach))
        self._inner = slice(inner[0] - self._rows.start, inner[1] - self._rows.start)
        self._screens = screens(self._rows.stop - self._rows.start)
        self._pieces = [Pieces(inner[1] - inner[0], width) for _ in self._screens]

    def push(self, plane: Plane) -> None:
        """Take in a whole layer, words ``[rows, words]``."""
        plane = np.ascontiguousarray(plane[self._rows])
        for screen, pieces in zip(self._screens, self._pieces, strict=True):
            flagged = screen.push(plane)
            if flagged is not None:
                pieces.add(np.ascontiguousarray(flagged[self._inner]))

    def found(self) -> list[list[Piece]]:
        """The flagged pieces of each screen, in rows of the whole layer."""
        for screen, pieces in zip(self._screens, self._pieces, strict=True):
            for flagged in screen.finish():
                pieces.add(np.ascontiguousarray(flagged[self._inner]))
        return [[self._moved(p) for p in pieces.found()] for pieces in self._pieces]

    def _moved(self, piece: Piece) -> Piece:
        column, row, layer = piece.place
        return replace(piece, place=(column, row + self._first, layer))


def split_rows(
    shape: tuple[int, int], planes: int, reach: int, memory: int
) -> list[tuple[int, int]]:
    """First and last row of bands for which so many planes in memory stay within `memory` bytes."""
    rows, width = shape
    fit = memory // (planes * ((width + 63) // 64) * 8)
    if fit >= rows:
        return [(0, rows)]
    size = max(16, fit - 2 * reach)
    return [(a, min(a + size, rows)) for a in range(0, rows, size)]

"""Separate pieces of a stack, found while its layers stream by."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.kernels.components import find_runs, gather_pieces, link_layer

__all__ = ["Piece", "Pieces"]


@dataclass(frozen=True, slots=True)
class Piece:
    """One connected piece.

    Attributes
    ----------
    sites : int
    place : tuple of int
        Column, row and layer of one of its sites.
    on_tray : bool
        It has a site in layer 0.
    at_side : bool
        It has a site at a side of the window, in any layer.
    """

    sites: int
    place: tuple[int, int, int]
    on_tray: bool
    at_side: bool


class Pieces:
    """Feed layers from the tray upwards, then ask for the pieces.

    Parameters
    ----------
    rows, width : int
        Size of a layer in sites.
    """

    def __init__(self, rows: int, width: int) -> None:
        self._width = width
        self._rows = rows
        self._layer = 0
        self._n = 0
        self._below = self._room(0)
        self._parent = np.empty(1024, dtype=np.int64)
        self._volume = np.empty(1024, dtype=np.int64)
        self._place = np.empty((1024, 3), dtype=np.int32)
        self._touches = np.empty(1024, dtype=np.uint8)

    def _room(
        self, runs: int
    ) -> tuple[NDArray[np.int64], NDArray[np.int32], NDArray[np.int32], NDArray[np.int64]]:
        return (
            np.zeros(self._rows + 1, dtype=np.int64),
            np.empty(runs, dtype=np.int32),
            np.empty(runs, dtype=np.int32),
            np.empty(runs, dtype=np.int64),
        )

    def add(self, plane: NDArray[np.uint64]) -> None:
        """Add the next layer, words ``[rows, words]``; bits past the width are 0."""
        here = self._room(4096)
        runs = find_runs(plane, *here[:3])
        if runs > len(here[1]):
            here = self._room(runs)
            find_runs(plane, *here[:3])
        if self._n + runs > len(self._parent):
            size = 2 * (self._n + runs)
            self._parent = np.resize(self._parent, size)
            self._volume = np.resize(self._volume, size)
            self._place = np.resize(self._place, (size, 3))
            self._touches = np.resize(self._touches, size)
        self._n = link_layer(
            self._layer, *here, *self._below,
            self._parent, self._volume, self._place, self._touches, self._n, self._width,
        )  # fmt: skip
        self._below = here
        self._layer += 1

    def found(self) -> list[Piece]:
        """All pieces, the largest first."""
        gather_pieces(self._parent, self._volume, self._touches, self._n)
        roots = np.flatnonzero(self._parent[: self._n] == np.arange(self._n))
        roots = roots[np.argsort(-self._volume[roots], kind="stable")]
        return [
            Piece(
                int(self._volume[r]),
                (int(self._place[r, 0]), int(self._place[r, 1]), int(self._place[r, 2])),
                bool(self._touches[r] & 1),
                bool(self._touches[r] & 2),
            )
            for r in roots
        ]

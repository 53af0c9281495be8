"""What the design says of a layer on a sample of its places, to compare a written layer with."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.io.bigpart import AnyPart
from voxelmat.printing.planes import DesignPlanes
from voxelmat.printing.readback import Stack

__all__ = ["Expected"]

_ACROSS = 192  # places along each side of a layer, at most
_SHARE = 0.01  # of the solid places, that may differ
_FEW = 8  # places, in addition
_KEPT = 16  # layers that differ and are kept to look for their place


class Expected:
    """The outline of a design at sampled places; layers are asked for from the tray upwards.

    Parameters
    ----------
    stack : Stack
        Of one part.
    part : Part or StoredPart
        What was sliced.

    Attributes
    ----------
    differing : list of (int, float)
        Layers that differ, and by which share of the solid places.
    """

    def __init__(self, stack: Stack, part: AnyPart) -> None:
        raster = stack.raster
        _, rows, columns = raster.image_shape
        self._planes = DesignPlanes(part, raster)
        self._cursor = self._planes.cursor()
        self._stepped = part.distance is None and part.occupancy is None
        self._rows = np.unique(np.linspace(0, rows - 1, min(rows, _ACROSS)).astype(int))
        self._columns = np.unique(np.linspace(0, columns - 1, min(columns, _ACROSS)).astype(int))
        shape = [part.grid.shape[a] for a, _ in raster.part_axes()]
        index = [raster.image_index(part.grid, m) for m in range(3)]
        self._layer_axis = self._axis(index[0], shape[0])
        self._row_axis = self._axis(index[1][self._rows], shape[1])
        self._column_axis = self._axis(index[2][self._columns], shape[2])
        self.differing: list[tuple[int, float]] = []
        self._kept: dict[int, tuple[NDArray[np.bool_], NDArray[np.bool_]]] = {}

    @property
    def limit(self) -> float:
        """Share of the solid places that may differ."""
        return _SHARE

    def _axis(
        self, index: NDArray[np.float64], n: int
    ) -> tuple[NDArray[np.int64], NDArray[np.float32], NDArray[np.bool_]]:
        """Lower voxel, weight of the upper one, and whether the place lies on the grid."""
        on = (index >= -0.5) & (index <= n - 0.5)
        clipped = np.clip(index, 0, n - 1)
        low = np.minimum(clipped.astype(np.int64), max(n - 2, 0))
        weight = (clipped - low).astype(np.float32)
        return low, np.rint(weight) if self._stepped else weight, on

    def layer(self, k: int) -> NDArray[np.bool_]:
        """Solid or not at the sampled places of one layer, ``[row, column]``."""
        low, weight, on = (v[k] for v in self._layer_axis)
        (r, rw, r_on), (c, cw, c_on) = self._row_axis, self._column_axis
        if not on:
            return np.zeros((len(r), len(c)), dtype=np.bool_)
        lower, upper = (self._cursor.plane(int(low) + m).outlines[0] for m in (0, 1))
        rows = []
        for side in (0, 1):
            a, b = (p[np.ix_(r + side, np.arange(p.shape[1]))] for p in (lower, upper))
            rows.append(a + weight * (b.astype(np.float32) - a))
        line = rows[0] + rw[:, None] * (rows[1] - rows[0])
        field = line[:, c] + cw * (line[:, c + 1] - line[:, c])
        return np.asarray((field < 0) & r_on[:, None] & c_on)

    def compare(self, k: int, solid: NDArray[np.uint64]) -> None:
        """Compare a written layer, words ``[row, word]``."""
        column = self._columns
        words = solid[np.ix_(self._rows, column >> 6)]
        there = (words >> (63 - (column & 63)).astype(np.uint64)) & np.uint64(1) != 0
        wanted = self.layer(k)
        differ = int((there != wanted).sum())
        size = max(int(wanted.sum()), int(there.sum()))
        if differ > _SHARE * size + _FEW or (size > 0 and not there.any() and wanted.any()):
            self.differing.append((k, differ / size))
            if len(self._kept) < _KEPT:
                self._kept[k] = (there, wanted)

    def fits(self, k: int) -> int | None:
        """Another differing layer whose place in the design layer `k` fits, if there is one."""
        if k not in self._kept:
            return None
        there = self._kept[k][0]
        for other, (_, wanted) in self._kept.items():
            differ = int((there != wanted).sum())
            if other != k and differ <= _SHARE * int(wanted.sum()):
                return other
        return None

"""The parts of a stack on coarse cells of whole sites, gathered while its layers stream by."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.kernels.maximin import count_cells
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.decoded import decoded_layers
from voxelmat.printing.readback import Stack, StackPart

__all__ = ["MOST_CELLS", "CoarsePart", "coarse_parts"]

#: Cells that are in memory at once; a part that needs more takes larger cells.
MOST_CELLS = 16_000_000


@dataclass(frozen=True, slots=True, eq=False)
class CoarsePart:
    """One part on cells.

    Attributes
    ----------
    part : StackPart
    sites : tuple of int
        Sites of a cell along layers, rows, columns.
    edge : tuple of float
        mm.
    fill : ndarray of uint8, shape (layers, rows, columns)
        Solid share of each cell, 255 for full; what lies beyond the window is empty.
    """

    part: StackPart
    sites: tuple[int, int, int]
    edge: tuple[float, float, float]
    fill: NDArray[np.uint8]

    def site(self, cell: tuple[int, int, int]) -> tuple[int, int, int]:
        """The first site of a cell, in the images of the stack."""
        z, y, x = (
            cut.start + c * n
            for cut, c, n in zip(
                (self.part.layers, self.part.rows, self.part.columns), cell, self.sites, strict=True
            )
        )
        return (z, y, x)


class _Gather:
    """Counts sites of one part, a layer of cells at a time."""

    def __init__(self, part: StackPart, pitch: tuple[float, ...], edge: float) -> None:
        self.part = part
        cuts = (part.layers, part.rows, part.columns)
        self._n = [c.stop - c.start for c in cuts]
        while True:
            self.sites = [max(1, int(edge / p + 1e-9)) for p in pitch]
            shape = [-(-n // s) for n, s in zip(self._n, self.sites, strict=True)]
            if np.prod([float(v) for v in shape]) <= MOST_CELLS:
                break
            edge *= 1.05
        self.cells = int(np.prod(shape))
        self._pitch = pitch
        self._shape = shape

    def start(self) -> None:
        self.fill = np.zeros(self._shape, np.uint8)
        self._count = np.zeros(self._shape[1:], np.int32)

    def push(self, layer: int, plane: NDArray[np.uint64]) -> None:
        at = layer - self.part.layers.start
        if not 0 <= at < self._n[0]:
            return
        first = (self.part.rows.start, self.part.columns.start)
        count_cells(plane, self.sites[1], self.sites[2], *first, self._count)
        if (at + 1) % self.sites[0] == 0 or at + 1 == self._n[0]:
            full = self.sites[0] * self.sites[1] * self.sites[2]
            share = self._count.astype(np.int64) * 255 // full
            self.fill[at // self.sites[0]] = np.minimum(share, 255)
            self._count[:] = 0

    def result(self) -> CoarsePart:
        z, y, x = self.sites
        edge = tuple(n * p for n, p in zip(self.sites, self._pitch, strict=True))
        return CoarsePart(self.part, (z, y, x), (edge[0], edge[1], edge[2]), self.fill)


def coarse_parts(stack: Stack, edge: float, *, monitor: Monitor = SILENT) -> Iterator[CoarsePart]:
    """Every part of a stack on cells of about `edge`, support counting as empty.

    Parts are gathered together as long as they fit `MOST_CELLS`; the stack is read once for each
    such group.
    """
    axes = stack.raster.image_axes
    pitch = tuple(float(stack.raster.pitch[axis]) for axis, _ in axes)
    waiting = [_Gather(p, pitch, edge) for p in stack.parts]
    while waiting:
        group = [waiting.pop(0)]
        while waiting and sum(g.cells for g in group) + waiting[0].cells <= MOST_CELLS:
            group.append(waiting.pop(0))
        for gather in group:
            gather.start()
        for k, layer in enumerate(decoded_layers(stack)):
            solid, _ = layer.union(support=False)
            for gather in group:
                gather.push(k, solid)
            monitor.report("gathering cells", done=k + 1, total=stack.n_layers)
        for gather in group:
            yield gather.result()

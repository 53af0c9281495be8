"""Slice and halftone a part, a slab of layers at a time, the same bits for any split."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.kernels.halftone import (
    blend_planes,
    halftone_layer,
    mark_interfaces,
)
from voxelmat.model.part import Part
from voxelmat.printing.mask import SIDE, SKEW, mask_phase, thresholds
from voxelmat.printing.planes import DesignPlanes, PlaneCursor
from voxelmat.printing.raster import Raster
from voxelmat.printing.support import fill_columns

__all__ = ["INTERFACE_RULE", "INTERFACE_STEP", "Slicer", "used_resins"]

#: Neighbouring voxels whose fraction of some resin differs by so much meet at an interface.
INTERFACE_STEP = 0.5
INTERFACE_RULE = (
    "Blend fractions are interpolated between neighbouring voxels, except in a cell of eight "
    "voxels where one is a pure resin and another is something else, or where the fraction of a "
    f"resin differs by {INTERFACE_STEP:g} or more: there each site takes its nearest voxel, so a "
    "pure zone is never dithered and an interface between bodies stays sharp."
)


def used_resins(part: Part) -> tuple[str, ...]:
    """Names of the resins that the printer lays, in the order of ``part.resins``."""
    count = np.bincount(part.labels.ravel(order="F"), minlength=len(part.palette))
    used = part.printed_labels() & (count > 0)
    table = part.palette_fractions()[used]
    return tuple(
        m.name for m, column in zip(part.resins, table.T, strict=True) if (column > 0).any()
    )


def _axis(
    index: NDArray[np.float64], count: int
) -> tuple[NDArray[np.uint32], NDArray[np.float32], tuple[int, int]]:
    """Lower voxel, weight of the upper one, and the first and last site on the grid."""
    on_grid = np.flatnonzero((index >= -0.5) & (index <= count - 0.5))
    bounds = (int(on_grid[0]), int(on_grid[-1]) + 1) if on_grid.size else (0, 0)
    clipped = np.clip(index, 0, count - 1)
    lower = np.minimum(clipped.astype(np.int64), max(count - 2, 0)).astype(np.uint32)
    return lower, (clipped - lower).astype(np.float32), bounds


def _rounded(weight: NDArray[np.float32]) -> NDArray[np.float32]:
    return (weight >= np.float32(0.5)).astype(np.float32)


#: Of one design plane: labels, outline fields, cumulative fractions.
_Fields = tuple[NDArray[np.uint16], NDArray[np.float32], NDArray[np.float32]]


class Slicer:
    """Everything that the layers of one part on one raster share; safe to use from threads.

    Parameters
    ----------
    part : Part
    raster : Raster
    resins : tuple of str
        Resin of each channel in order; material number m is ``resins[m - 1]``.
    support : bool
        Draw support columns, as material ``len(resins) + 1``.
    seed : int
        Moves the start of the blue-noise mask.
    """

    def __init__(
        self, part: Part, raster: Raster, resins: tuple[str, ...], *, support: bool, seed: int
    ) -> None:
        if len(resins) > 100:
            raise InputError(f"At most 100 resins can be sliced at once; got {len(resins)}.")
        self.raster = raster
        self.n_channels = len(resins) + int(support)
        column = {m.name: c for c, m in enumerate(part.resins)}
        table = part.palette_fractions()[:, [column[r] for r in resins]]
        self._fractions = table.astype(np.float32)
        self._pure = table.max(axis=1) == 1.0
        total = np.cumsum(table, axis=1)[:, :-1]
        total[total > 1 - 1e-6] = 1.0  # rounding must not leave a sliver to the last resin
        self._cumulative = np.ascontiguousarray(total.T.astype(np.float32))
        self._lay_out(part, support)
        self._mask = thresholds()
        self._start = np.add(mask_phase(seed), raster.image_offset)

    def _lay_out(self, part: Part, support: bool) -> None:
        """Say where the planes come from and find the sites between voxels."""
        raster = self.raster
        self.planes = DesignPlanes(part, raster, support=fill_columns if support else None)
        true_shape = [part.grid.shape[a] for a, _ in raster.part_axes()]
        axes = [_axis(raster.image_index(part.grid, m), true_shape[m]) for m in range(3)]
        (self._layer_at, self._layer_w, self._layers_on_grid) = axes[0]
        (self._row_at, self._row_w, rows) = axes[1]
        (self._column_at, self._column_w, columns) = axes[2]
        self._window = np.array([*rows, *columns], dtype=np.int64)
        stepped = part.distance is None and part.occupancy is None
        weights = (self._layer_w, self._row_w, self._column_w)
        self._outline_w = tuple(_rounded(w) if stepped else w for w in weights)

    def _plane(self, cursor: PlaneCursor, k: int) -> _Fields:
        """Labels, outline fields and cumulative fractions of one design plane."""
        plane = cursor.plane(k)
        smooth = np.ascontiguousarray(self._cumulative[:, plane.labels])
        return plane.labels, plane.outlines.astype(np.float32), smooth

    def layers(self, first: int, last: int) -> Iterator[NDArray[np.uint8]]:
        """The packed bits of layers ``first`` to ``last - 1``.

        Yields
        ------
        ndarray of uint8, shape (channels, rows, ceil(columns / 8))
            A fresh array a layer; the first pixel of a row in the highest bit.
        """
        _, n_rows, n_columns = self.raster.image_shape
        shape = self.planes.shape
        outline = np.empty((self.planes.n_fields, *shape[1:]), dtype=np.float32)
        smooth = np.empty((len(self._cumulative), *shape[1:]), dtype=np.float32)
        hard = np.empty((shape[1] - 1, shape[2] - 1), dtype=np.uint8)
        at, ready = -1, dict[int, _Fields]()
        cursor = self.planes.cursor(*self._plane_range(first, last))
        for layer in range(first, last):
            bits = np.zeros((self.n_channels, n_rows, (n_columns + 7) // 8), dtype=np.uint8)
            if not self._layers_on_grid[0] <= layer < self._layers_on_grid[1]:
                yield bits
                continue
            k, w = int(self._layer_at[layer]), self._layer_w[layer]
            if k != at:
                at = k
                ready = {m: ready.get(m) or self._plane(cursor, m) for m in (k, k + 1)}
                lower, upper = ready[k], ready[k + 1]
                mark_interfaces(
                    lower[0],
                    upper[0],
                    self._fractions,
                    self._pure,
                    np.float32(INTERFACE_STEP),
                    hard,
                )
            blend_planes(lower[1], upper[1], self._outline_w[0][layer], outline)
            blend_planes(lower[2], upper[2], w, smooth)
            near = upper[2] if w >= np.float32(0.5) else lower[2]
            start = (self._start + np.array([layer, 0, 0])).astype(np.int64)
            halftone_layer(
                outline, smooth, near, hard,
                self._row_at, self._row_w, self._outline_w[1],
                self._column_at, self._column_w, self._outline_w[2],
                self._window, self._mask, start, SKEW[0], SKEW[1], bits,
            )  # fmt: skip
            yield bits

    def _plane_range(self, first: int, last: int) -> tuple[int, int]:
        """First and last design plane that some layers lie between."""
        if last <= first:
            return (0, 0)
        return (int(self._layer_at[first]), int(self._layer_at[last - 1]) + 2)

    def slabs(self, size: int = SIDE) -> list[tuple[int, int]]:
        """First and last layer of slabs of at most `size` layers."""
        n = self.raster.image_shape[0]
        return [(a, min(a + size, n)) for a in range(0, n, size)]

"""Slice and halftone a part, a slab of layers at a time, the same bits for any split."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.io.bigpart import AnyPart
from voxelmat.kernels.diffusion import diffuse_layer
from voxelmat.kernels.halftone import blend_planes, halftone_layer, mark_interfaces
from voxelmat.kernels.ramp import mark_ramps
from voxelmat.kernels.sites import pack_sites
from voxelmat.model.halftone import Halftone
from voxelmat.printing.mask import SIDE, SKEW, mask_phase, thresholds
from voxelmat.printing.order import INTERFACE_STEP, laying_order
from voxelmat.printing.planes import DesignPlanes, PlaneCursor
from voxelmat.printing.ramp import InterfaceRamps, RampPlane
from voxelmat.printing.raster import Raster
from voxelmat.printing.support import SupportFill, fill_columns

__all__ = ["MOST_RESINS", "Slicer", "packed_planes"]

#: A site is a byte: 0 for nothing, the resins, and support.
MOST_RESINS = 254
#: So many channels of a layer are packed at a time, whatever their number.
GROUP = 8
#: Error diffusion: what is passed on within the layer (7, 3, 5, 1 over 16 of 60 %), straight up
#: and to each side of the layer above.
_WEIGHTS = np.array([7, 3, 5, 1, 0, 0]) * 0.6 / 16 + np.array([0, 0, 0, 0, 0.16, 0.06])
#: Error diffusion: width of the noise on what each resin is owed.
_NOISE = 0.5
#: Error diffusion: a site over an undithered one starts with what a site in the midst of a blend
#: holds on average, so that the lowest layers are not short of rare droplets (measured).
_HEAD_START = 0.21


def _fractions(part: AnyPart, resins: tuple[str, ...]) -> NDArray[np.float64]:
    """Volume fractions, shape (palette, resins); zero for a resin that the part has none of."""
    given = part.palette_fractions()
    column = {m.name: c for c, m in enumerate(part.resins)}
    out = np.zeros((len(given), len(resins)))
    for q, name in enumerate(resins):
        if name in column:
            out[:, q] = given[:, column[name]]
    return out


def packed_planes(sites: NDArray[np.uint8], n: int) -> Iterator[NDArray[np.uint8]]:
    """The packed bits of numbers 1 to `n` one after another, a few of them in memory at a time.

    Parameters
    ----------
    sites : ndarray of uint8, shape (rows, columns)
        Columns a multiple of 8.
    n : int
        At most 255.

    Yields
    ------
    ndarray of uint8, shape (rows, columns / 8)
        The first site of a row in the highest bit.
    """
    for first in range(0, n, GROUP):
        bits = np.empty((min(GROUP, n - first), len(sites), sites.shape[1] // 8), dtype=np.uint8)
        pack_sites(sites, first, bits)
        yield from bits


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


@dataclass(frozen=True, slots=True)
class _Fields:
    """Of one design plane: labels, outline fields, and the ramps of dithered interfaces."""

    labels: NDArray[np.uint16]
    outlines: NDArray[np.int8]
    ramp: RampPlane | None


class Slicer:
    """Everything that the layers of one part on one raster share; safe to use from threads.

    Parameters
    ----------
    part : Part or StoredPart
    raster : Raster
    resins : tuple of str
        Each once; material number m is ``resins[m - 1]``. The part need not have all of them.
    support : bool or SupportFill
        Draw support as material ``len(resins) + 1``: columns where True, else as it fills.
    seed : int
        Moves the start of the blue-noise mask; the key of noise.
    halftone : Halftone, optional
        Blue noise and hard interfaces if left out.
    support_file : Path, optional
        Keeps the support field; see `DesignPlanes`.
    planes : DesignPlanes, optional
        Those of a slicer of the same part that lies the same way, with the same support.

    Attributes
    ----------
    order : tuple of str
        The resins in the order in which thresholds lay them.

    Raises
    ------
    InputError
        If there are too many resins, or the halftone does not go with the part.
    """

    def __init__(
        self,
        part: AnyPart,
        raster: Raster,
        resins: tuple[str, ...],
        *,
        support: bool | SupportFill,
        seed: int,
        halftone: Halftone | None = None,
        support_file: Path | None = None,
        planes: DesignPlanes | None = None,
    ) -> None:
        if len(resins) > MOST_RESINS:
            raise InputError(
                f"At most {MOST_RESINS} resins can be sliced at once; got {len(resins)}."
            )
        self.raster = raster
        self.n_channels = len(resins) + int(support is not False)
        self.halftone = Halftone() if halftone is None else halftone
        self.order = laying_order(part.resins, resins, self.halftone)
        table = _fractions(part, self.order)
        self._fractions = table.astype(np.float32)
        self._pure = table.max(axis=1) == 1.0
        total = np.cumsum(table, axis=1)[:, :-1]
        total[total > 1 - 1e-6] = 1.0  # rounding must not leave a sliver to the last resin
        self._cumulative = np.ascontiguousarray(total.T.astype(np.float32))
        numbers = [resins.index(r) + 1 for r in self.order]
        self._numbers = np.array([*numbers, len(resins) + 1], dtype=np.uint8)
        if planes is None:
            columns = fill_columns if support else None
            fill = columns if isinstance(support, bool) else support
            planes = DesignPlanes(part, raster, support=fill, support_file=support_file)
        self.planes = planes
        self._lay_out(part)
        self._set_up_noise(seed)
        self._set_up_ramps(part)

    def _lay_out(self, part: AnyPart) -> None:
        """Find the sites between voxels."""
        raster = self.raster
        true_shape = [part.grid.shape[a] for a, _ in raster.part_axes()]
        axes = [_axis(raster.image_index(part.grid, m), true_shape[m]) for m in range(3)]
        (self._layer_at, self._layer_w, self._layers_on_grid) = axes[0]
        (self._row_at, self._row_w, rows) = axes[1]
        (self._column_at, self._column_w, across) = axes[2]
        self._window = np.array([*rows, *across], dtype=np.int64)
        stepped = part.distance is None and part.occupancy is None
        weights = (self._layer_w, self._row_w, self._column_w)
        self._outline_w = tuple(_rounded(w) if stepped else w for w in weights)

    def _set_up_noise(self, seed: int) -> None:
        """The threshold mask (empty: white noise), where it starts, and the key of noise."""
        blue = self.halftone.method == "blue noise"
        self._mask = thresholds() if blue else np.empty((0, 0, 0), dtype=np.float32)
        phase = mask_phase(seed) if blue else (0, 0, 0)
        self._start = np.add(phase, self.raster.image_offset).astype(np.int64)
        self._key = np.random.Generator(np.random.Philox(key=[seed, 1])).integers(
            0, 2**64, dtype=np.uint64
        )

    def _set_up_ramps(self, part: AnyPart) -> None:
        self._ramps: InterfaceRamps | None = None
        pairs: list[tuple[int, int]] = []
        if self.halftone.has_widths:
            ramps = InterfaceRamps(part, self.raster, self.order, self.halftone)
            pairs = ramps.pairs
            self._ramps = ramps if pairs else None
        self._pair_at = np.array([(0, 0), (0, 0), *pairs], dtype=np.int64)
        self._ends = self._numbers[self._pair_at]

    @property
    def image_shape(self) -> tuple[int, int, int]:
        """Layers, rows, columns."""
        return self.raster.image_shape

    @property
    def serial(self) -> bool:
        """True where a layer needs those below it: runs that start higher up make them again."""
        return self.halftone.is_serial

    @property
    def state_bytes(self) -> int:
        """Memory of what error diffusion carries from layer to layer; 0 for other methods."""
        if not self.serial:
            return 0
        _, n_rows, n_columns = self.image_shape
        return n_rows * n_columns * (4 * len(self.order) + 1)

    # ------------------------------------------------------------------ planes
    def _plane(self, cursor: PlaneCursor, k: int) -> _Fields:
        plane = cursor.plane(k)
        ramp = None
        if self._ramps is not None:
            ramp = self._ramps.plane(self.planes, k, plane.labels)
        return _Fields(plane.labels, plane.outlines, ramp)

    def _cells(self, lower: _Fields, upper: _Fields, hard: NDArray[np.uint8]) -> None:
        """Say of each cell between two planes how its blends are interpolated."""
        step = np.float32(INTERFACE_STEP)
        mark_interfaces(lower.labels, upper.labels, self._fractions, self._pure, step, hard)
        if lower.ramp is not None and upper.ramp is not None:
            mark_ramps(lower.ramp.pair, upper.ramp.pair, hard)

    def _plane_range(self, first: int, last: int) -> tuple[int, int]:
        """First and last design plane that some layers lie between."""
        if last <= first:
            return (0, 0)
        return (int(self._layer_at[first]), int(self._layer_at[last - 1]) + 2)

    # ------------------------------------------------------------------ layers
    def sites(self, first: int, last: int) -> Iterator[NDArray[np.uint8]]:
        """The material number of every site of layers ``first`` to ``last - 1``.

        Yields
        ------
        ndarray of uint8, shape (rows, columns rounded up to a multiple of 8)
            0 where nothing is laid. The array is used again for the next layer.
        """
        _, n_rows, n_columns = self.image_shape
        out = np.zeros((n_rows, (n_columns + 7) // 8 * 8), dtype=np.uint8)
        shape = self.planes.shape
        outline = np.empty((self.planes.n_fields, *shape[1:]), dtype=np.float32)
        hard = np.empty((shape[1] - 1, shape[2] - 1), dtype=np.uint8)
        ramp = np.empty((0, 0), dtype=np.float32)
        low, high = self._layers_on_grid
        start = min(first, low) if self.serial else first
        state = self._fresh_state()
        at, ready = -1, dict[int, _Fields]()
        cursor = self.planes.cursor(*self._plane_range(start, last))
        for layer in range(start, last):
            if not low <= layer < high:
                out[:] = 0
                if layer >= first:
                    yield out
                continue
            k, w = int(self._layer_at[layer]), self._layer_w[layer]
            if k != at:
                at = k
                ready = {m: v for m, v in ready.items() if m == k}
                ready = {m: ready.get(m) or self._plane(cursor, m) for m in (k, k + 1)}
                self._cells(ready[k], ready[k + 1], hard)
            lower, upper = ready[k], ready[k + 1]
            blend_planes(lower.outlines, upper.outlines, self._outline_w[0][layer], outline)
            if lower.ramp is not None and upper.ramp is not None:
                ramp = lower.ramp.place + w * (upper.ramp.place - lower.ramp.place)
            fields = (
                outline, lower.labels, upper.labels,
                upper.labels if w >= np.float32(0.5) else lower.labels,
                w, self._cumulative, self._numbers, hard, ramp,
            )  # fmt: skip
            self._lay(layer, fields, state, out)
            if layer >= first:
                yield out

    def _fresh_state(self) -> tuple[NDArray[Any], ...]:
        """What error diffusion carries from layer to layer."""
        if not self.serial:
            return ()
        _, n_rows, n_columns = self.image_shape
        carry = np.zeros((n_rows, n_columns, len(self.order)), dtype=np.float32)
        return (carry, np.zeros((n_rows, n_columns), dtype=np.uint8))

    def _lay(
        self,
        layer: int,
        fields: tuple[Any, ...],
        state: tuple[NDArray[Any], ...],
        out: NDArray[np.uint8],
    ) -> None:
        """Halftone one layer into `out`."""
        start = self._start + np.array([layer, 0, 0])
        axes = (
            self._row_at, self._row_w, self._outline_w[1],
            self._column_at, self._column_w, self._outline_w[2], self._window,
        )  # fmt: skip
        if self.serial:
            diffuse_layer(
                *fields, self._pair_at, *axes, start, self._key, _WEIGHTS.astype(np.float32),
                np.float32(_NOISE), np.float32(_HEAD_START), *state, out,
            )  # fmt: skip
        else:
            halftone_layer(
                *fields, self._ends, *axes, self._mask, start, SKEW[0], SKEW[1], self._key, out
            )

    def layers(self, first: int, last: int) -> Iterator[NDArray[np.uint8]]:
        """The packed bits of layers ``first`` to ``last - 1``.

        Yields
        ------
        ndarray of uint8, shape (channels, rows, ceil(columns / 8))
            A fresh array a layer; the first pixel of a row in the highest bit.
        """
        for sites in self.sites(first, last):
            yield np.stack(list(packed_planes(sites, self.n_channels)))

    def slabs(self, size: int = SIDE) -> list[tuple[int, int]]:
        """First and last layer of slabs of at most `size` layers."""
        n = self.raster.image_shape[0]
        return [(a, min(a + size, n)) for a in range(0, n, size)]

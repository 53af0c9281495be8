"""Several parts in one image: the layers of a tray, byte by byte from those of its parts."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.kernels.sites import lay_over
from voxelmat.model.profile import PrintProfile
from voxelmat.printing.halftone import Slicer, packed_planes
from voxelmat.printing.job import PlacedPart
from voxelmat.printing.raster import Raster

__all__ = ["TraySource", "on_whole_bytes", "tray_window"]

_BYTE = 8


def on_whole_bytes(raster: Raster, first_column: int = 0) -> Raster:
    """The same place with up to 7 empty columns more, so that it starts on a byte of a window.

    The part does not move by a site; only its own window grows, towards the first column.

    Parameters
    ----------
    raster : Raster
    first_column : int
        Where the window of the whole job starts in the image of the whole tray, or a multiple of
        8 before or after it.
    """
    tray_axis, sign = raster.image_axes[2]
    spare = (raster.image_offset[2] - first_column) % _BYTE
    shape, offset = list(raster.shape), list(raster.offset)
    shape[tray_axis] += spare
    if sign > 0:
        offset[tray_axis] -= spare
    return replace(
        raster,
        shape=(shape[0], shape[1], shape[2]),
        offset=(offset[0], offset[1], offset[2]),
    )


def tray_window(rasters: Sequence[Raster], profile: PrintProfile) -> Raster:
    """The least window without turn and translation that holds all of `rasters`."""
    low = [min(r.offset[a] for r in rasters) for a in range(3)]
    high = [max(r.offset[a] + r.shape[a] for r in rasters) for a in range(3)]
    sites = profile.tray_sites
    return Raster(
        pitch=profile.pitch,
        shape=(high[0] - low[0], high[1] - low[1], high[2] - low[2]),
        offset=(low[0], low[1], 0),
        rotation=((1, 0, 0), (0, 1, 0), (0, 0, 1)),
        translation=(0.0, 0.0, 0.0),
        tray_sites=(sites[0], sites[1]),
        origin_corner=profile.origin_corner,
        row_direction=profile.row_direction,
    )


class TraySource:
    """Layers of a whole tray; each part is sliced in its own window and laid over the others.

    Windows may overlap as boxes; that their droplets do not is checked when a tray is laid out
    (`voxelmat.printing.clearance`) and again by the preflight on what was written.

    Parameters
    ----------
    parts : sequence of PlacedPart
    slicers : sequence of Slicer
        One a part, of the same materials.
    window : Raster

    Raises
    ------
    InputError
        If a part does not start at a whole byte of the image.
    """

    def __init__(
        self, parts: Sequence[PlacedPart], slicers: Sequence[Slicer], window: Raster
    ) -> None:
        self.window = window
        self._slicers = tuple(slicers)
        self._names = [item.name for item in parts]
        self._starts = []
        for item in parts:
            start = [
                a - b for a, b in zip(item.raster.image_offset, window.image_offset, strict=True)
            ]
            if start[2] % _BYTE:
                raise InputError(
                    f"'{item.name}' starts at column {start[2]} of the tray's images; windows of "
                    "several parts start at a multiple of 8 (`on_whole_bytes`).",
                    key="parts",
                )
            self._starts.append((start[1], start[2] // _BYTE))

    @property
    def image_shape(self) -> tuple[int, int, int]:
        """Layers, rows, columns."""
        return self.window.image_shape

    @property
    def n_channels(self) -> int:
        """Materials: the resins of the job in order, support last."""
        return self._slicers[0].n_channels

    def sites(self, first: int, last: int) -> Iterator[NDArray[np.uint8]]:
        """The material number of every site of layers ``first`` to ``last - 1``.

        Yields
        ------
        ndarray of uint8, shape (rows, columns rounded up to a multiple of 8)
            0 where nothing is laid. The array is used again for the next layer.

        Raises
        ------
        InputError
            Where two parts claim the same site.
        """
        _, rows, columns = self.image_shape
        out = np.empty((rows, -(-columns // _BYTE) * _BYTE), dtype=np.uint8)
        running: list[Iterator[NDArray[np.uint8]]] = [
            s.sites(min(first, s.image_shape[0]), min(last, s.image_shape[0]))
            for s in self._slicers
        ]
        for layer in range(first, last):
            out[:] = 0
            for name, slicer, sites, (row, byte) in zip(
                self._names, self._slicers, running, self._starts, strict=True
            ):
                if layer >= slicer.image_shape[0]:
                    continue
                own = next(sites)
                column = byte * _BYTE
                there = out[row : row + own.shape[0], column : column + own.shape[1]]
                if lay_over(own, there):
                    raise InputError(
                        f"'{name}' and another part claim the same droplet sites in layer {layer}; "
                        "move them apart.",
                        key="parts",
                    )
            yield out

    def layers(self, first: int, last: int) -> Iterator[NDArray[np.uint8]]:
        """The packed bits of layers ``first`` to ``last - 1``.

        Yields
        ------
        ndarray of uint8, shape (materials, rows, ceil(columns / 8))
            A fresh array a layer.
        """
        for sites in self.sites(first, last):
            yield np.stack(list(packed_planes(sites, self.n_channels)))

"""What each layer of a stack holds: sites a channel, occupied swaths, and the view from above."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.kernels.bitplane import claims, count_planes, to_words
from voxelmat.model.profile import PrintProfile
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.decoded import decoded_layers
from voxelmat.printing.raster import Raster
from voxelmat.printing.readback import Stack

__all__ = ["Occupancy", "SwathCounter", "gather", "packed_counts"]

Plane = NDArray[np.uint64]


class SwathCounter:
    """Counts the swaths of a layer that hold at least one site.

    Swaths lie side by side along tray y, the first at the front edge of the window. That the
    heads can start there is an assumption of ours.

    Parameters
    ----------
    window : Raster
    profile : PrintProfile
    """

    def __init__(self, window: Raster, profile: PrintProfile) -> None:
        axes = [axis for axis, _ in window.image_axes]
        self._along_rows = axes[1] == 1
        self._sign = window.image_axes[axes.index(1)][1]
        n = window.shape[1]
        swath = (np.arange(n) + 0.5) * float(window.pitch[1]) / profile.process.swath_mm
        self._starts = np.unique(swath.astype(np.int64), return_index=True)[1]
        self._width = window.image_shape[2]

    @property
    def most(self) -> int:
        """Swaths of the whole window."""
        return len(self._starts)

    def count(self, solid: Plane) -> int:
        """Occupied swaths of one layer of words u64 [rows, words]."""
        if self._along_rows:
            used = np.asarray(solid.any(axis=1))
        else:
            line = np.bitwise_or.reduce(solid, axis=0).astype(">u8").view(np.uint8)
            used = np.unpackbits(line, count=self._width).astype(bool)
        return int(np.logical_or.reduceat(used[:: self._sign], self._starts).sum())


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Occupancy:
    """What one pass over a stack finds.

    Attributes
    ----------
    sites : ndarray of int64, shape (layers, channels)
    swaths : ndarray of int64, shape (layers,)
        Swaths that hold at least one site; all of them in a layer that cannot be read.
    above : ndarray of bool, shape (nx, ny)
        Sites along tray x and y over which any layer of the model channels has material.
    """

    sites: NDArray[np.int64]
    swaths: NDArray[np.int64]
    above: NDArray[np.bool_]


def gather(
    stack: Stack, profile: PrintProfile | None = None, *, monitor: Monitor = SILENT
) -> Occupancy:
    """Read a stack once and count.

    Parameters
    ----------
    stack : Stack
    profile : PrintProfile, optional
        The one in the manifest if left out; its swath width counts.
    monitor : Monitor
    """
    counter = SwathCounter(stack.raster, stack.profile if profile is None else profile)
    sites = np.zeros((stack.n_layers, len(stack.channels)), dtype=np.int64)
    swaths = np.full(stack.n_layers, counter.most, dtype=np.int64)
    _, rows, width = stack.raster.image_shape
    above = np.zeros((rows, (width + 63) // 64), dtype=np.uint64)
    for k, layer in enumerate(decoded_layers(stack)):
        count_planes(layer.planes, sites[k])
        if not layer.bad:
            swaths[k] = counter.count(layer.union(support=True)[0])
        above |= layer.union(support=False)[0]
        monitor.report("counting sites", done=k + 1, total=stack.n_layers)
    image = np.unpackbits(above.astype(">u8").view(np.uint8), axis=1, count=width).astype(bool)
    return Occupancy(sites=sites, swaths=swaths, above=stack.raster.from_image(image))


def packed_counts(bits: NDArray[np.uint8]) -> tuple[NDArray[np.int64], Plane]:
    """Sites of each channel of packed bits u8 [channels, rows, stride], and their union."""
    channels, rows, stride = bits.shape
    planes = np.zeros((channels, rows, (stride + 7) // 8), dtype=np.uint64)
    for channel in range(channels):
        to_words(bits[channel], planes[channel])
    count = np.zeros(channels, dtype=np.int64)
    count_planes(planes, count)
    once, twice = np.empty_like(planes[0]), np.empty_like(planes[0])
    claims(planes, once, twice)
    return count, once

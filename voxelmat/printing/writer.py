"""Write the layers of a stack slab by slab on several threads, journalling each whole layer."""

from __future__ import annotations

import hashlib
import threading
from collections.abc import Sequence
from concurrent.futures import FIRST_COMPLETED, Future, ThreadPoolExecutor, wait

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import Cancelled
from voxelmat.io.png import encode_bitmap
from voxelmat.kernels.bitplane import count_planes, to_words
from voxelmat.monitor import Monitor
from voxelmat.printing.halftone import Slicer
from voxelmat.printing.journal import Journal, LayerRecord
from voxelmat.printing.manifest import layer_name

__all__ = ["LayerWriter", "write_layers"]


class LayerWriter:
    """Slices, encodes, writes and journals slabs of layers; one object serves all threads.

    Parameters
    ----------
    slicer : Slicer
    journal : Journal
    names : sequence of str
        Folder of each channel.
    inverted : bool
        True where black is material.
    """

    def __init__(
        self, slicer: Slicer, journal: Journal, names: Sequence[str], inverted: bool
    ) -> None:
        self.slicer = slicer
        self.journal = journal
        self.stop = threading.Event()
        self._folders = [journal.partial / n for n in names]
        self._inverted = inverted
        self._width = slicer.raster.image_shape[2]
        self._ppm = slicer.raster.pixels_per_metre

    def slab(self, first: int, last: int) -> None:
        """Write the layers ``first`` to ``last - 1``."""
        for layer, bits in enumerate(self.slicer.layers(first, last), start=first):
            if self.stop.is_set():
                return
            sites = _count(bits)
            image = ~bits if self._inverted else bits
            digests = []
            for plane, folder in zip(image, self._folders, strict=True):
                data = encode_bitmap(plane, self._width, self._ppm)
                (folder / layer_name(layer)).write_bytes(data)
                digests.append(hashlib.sha256(data).hexdigest())
            self.journal.add(LayerRecord(layer, tuple(digests), tuple(sites)))


def _count(bits: NDArray[np.uint8]) -> list[int]:
    """Set bits of each channel."""
    count = np.zeros(len(bits), dtype=np.int64)
    words = np.empty((bits.shape[1], (bits.shape[2] + 7) // 8), dtype=np.uint64)
    for channel, plane in enumerate(bits):
        to_words(plane, words)
        count_planes(words[None], count[channel : channel + 1])
    return [int(c) for c in count]


def _missing_slabs(writer: LayerWriter, size: int) -> list[tuple[int, int]]:
    """Runs of layers that are still to be written, cut to `size`."""
    slabs: list[tuple[int, int]] = []
    for layer in range(writer.slicer.raster.image_shape[0]):
        if layer in writer.journal.done:
            continue
        if slabs and slabs[-1][1] == layer and layer - slabs[-1][0] < size:
            slabs[-1] = (slabs[-1][0], layer + 1)
        else:
            slabs.append((layer, layer + 1))
    return slabs


def write_layers(writer: LayerWriter, monitor: Monitor, threads: int, size: int) -> None:
    """Write all missing layers; on any error or cancel, stop at whole layers and pass it on."""
    total = writer.slicer.raster.image_shape[0]
    stage = "writing layers"
    monitor.report(stage, done=len(writer.journal.done), total=total)
    pool = ThreadPoolExecutor(threads, thread_name_prefix="voxelmat-slice")
    try:
        open_: set[Future[None]] = {
            pool.submit(writer.slab, a, b) for a, b in _missing_slabs(writer, size)
        }
        while open_:
            finished, open_ = wait(open_, timeout=0.25, return_when=FIRST_COMPLETED)
            for future in finished:
                future.result()
            monitor.report(stage, done=len(writer.journal.done), total=total)
    finally:
        writer.stop.set()
        pool.shutdown(wait=True, cancel_futures=True)
    if len(writer.journal.done) != total:
        raise Cancelled(f"Stopped with {len(writer.journal.done)} of {total} layers written.")

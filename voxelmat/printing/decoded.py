"""The layers of a stack as packed words, a few read and decoded ahead, faults noted not raised."""

from __future__ import annotations

from collections import deque
from collections.abc import Iterator
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.kernels.bitplane import claims, to_words
from voxelmat.printing.readback import Stack

__all__ = ["DecodedLayer", "decoded_layers"]

Plane = NDArray[np.uint64]
_AHEAD = 2  # layers that are read and decoded while an earlier one is looked at


@dataclass(slots=True)
class DecodedLayer:
    """One layer.

    Attributes
    ----------
    planes : ndarray of uint64, shape (channels, rows, words)
        All zero where a file could not be read.
    support : int or None
        Which channel is support.
    bad : list of (int, str)
        Channels whose file could not be read, and why.
    changed : list of int
        Channels whose file is not the one that was written.
    """

    planes: Plane
    support: int | None
    bad: list[tuple[int, str]]
    changed: list[int]

    def union(self, *, support: bool) -> tuple[Plane, Plane]:
        """Sites claimed by any channel, and by more than one; with or without support."""
        planes = self.planes
        if not support and self.support is not None:
            planes = np.delete(planes, self.support, axis=0)
        once, twice = np.empty_like(planes[0]), np.empty_like(planes[0])
        claims(planes, once, twice)
        return once, twice


def _read(stack: Stack, layer: int) -> DecodedLayer:
    _, rows, width = stack.raster.image_shape
    planes = np.zeros((len(stack.channels), rows, (width + 63) // 64), dtype=np.uint64)
    read = stack.files.examine(layer)
    for bits, plane in zip(read.bits, planes, strict=True):
        to_words(bits, plane)
    return DecodedLayer(planes, stack.support_channel, read.bad, read.changed)


def decoded_layers(stack: Stack) -> Iterator[DecodedLayer]:
    """Decoded layers from the tray upwards."""
    with ThreadPoolExecutor(1, thread_name_prefix="voxelmat-read") as pool:
        waiting: deque[Future[DecodedLayer]] = deque()
        for layer in range(stack.n_layers):
            waiting.append(pool.submit(_read, stack, layer))
            if len(waiting) > _AHEAD:
                yield waiting.popleft().result()
        while waiting:
            yield waiting.popleft().result()

"""The files of one layer: which there are, what they hold, and the bits that they give back."""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from voxelmat.io.png import encode_bitmap
from voxelmat.kernels.bitplane import count_planes, to_words
from voxelmat.printing.journal import LayerRecord
from voxelmat.printing.manifest import layer_name
from voxelmat.printing.raster import Raster

__all__ = ["ImageFiles"]


class ImageFiles:
    """Encodes the layers of one stack.

    Parameters
    ----------
    window : Raster
    channels : sequence of str
    polarity : str
    """

    def __init__(self, window: Raster, channels: Sequence[str], polarity: str) -> None:
        self._channels = tuple(channels)
        self._inverted = polarity == "black is material"
        self.n_layers = window.image_shape[0]
        self._width = window.image_shape[2]
        self._ppm = window.pixels_per_metre

    @property
    def folders(self) -> tuple[str, ...]:
        """Folders that hold the files."""
        return self._channels

    def names(self, layer: int) -> tuple[str, ...]:
        """Files of one layer, as paths inside the stack's folder."""
        return tuple(f"{c}/{layer_name(layer)}" for c in self._channels)

    def encode(self, layer: int, bits: NDArray[np.uint8]) -> list[bytes]:
        """What the files of one layer hold, in the order of `names`.

        Parameters
        ----------
        layer : int
        bits : ndarray of uint8, shape (channels, rows, stride)
        """
        image = ~bits if self._inverted else bits
        return [encode_bitmap(plane, self._width, self._ppm) for plane in image]

    def write(self, folder: Path, layer: int, bits: NDArray[np.uint8]) -> LayerRecord:
        """Write the files of one layer and say what they are."""
        digests = []
        for name, data in zip(self.names(layer), self.encode(layer, bits), strict=True):
            (folder / name).write_bytes(data)
            digests.append(hashlib.sha256(data).hexdigest())
        return LayerRecord(layer, tuple(digests), tuple(_count(bits)))


def _count(bits: NDArray[np.uint8]) -> list[int]:
    """Set bits of each channel."""
    count = np.zeros(len(bits), dtype=np.int64)
    words = np.empty((bits.shape[1], (bits.shape[2] + 7) // 8), dtype=np.uint64)
    for channel, plane in enumerate(bits):
        to_words(plane, words)
        count_planes(words[None], count[channel : channel + 1])
    return [int(c) for c in count]

"""The files of a finished stack, read one layer at a time, nothing believed unchecked."""

from __future__ import annotations

import hashlib
import threading
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import FileFormatError
from voxelmat.io.tiff import TiffPages
from voxelmat.printing.imagefiles import ImageFiles

__all__ = ["ReadLayer", "StackFiles"]


@dataclass(slots=True)
class ReadLayer:
    """One layer as it was read.

    Attributes
    ----------
    bits : ndarray of uint8, shape (channels, rows, ceil(columns / 8))
        All zero where a file could not be read.
    bad : list of (int, str)
        Channels whose file could not be read, and why.
    changed : list of int
        Channels whose file is not the one that was written.
    """

    bits: NDArray[np.uint8]
    bad: list[tuple[int, str]] = field(default_factory=list)
    changed: list[int] = field(default_factory=list)


class StackFiles:
    """Reads the files of one stack; safe to use from threads.

    Parameters
    ----------
    folder : Path
    images : ImageFiles
    digests : sequence of sequence of str
        For each channel the SHA-256 of each layer's file or page; for indexed images one row.
    shape : tuple of int
        Channels, rows and bytes a row of one layer's bits.
    """

    def __init__(
        self,
        folder: Path,
        images: ImageFiles,
        digests: Sequence[Sequence[str]],
        shape: tuple[int, int, int],
    ) -> None:
        self._folder = folder
        self._images = images
        self._digests = digests
        self._shape = shape
        self._indexed = images.kind == "png index"
        self._pages: dict[int, TiffPages] = {}
        self._last: tuple[bytes, NDArray[np.uint8]] | None = None
        self._lock = threading.Lock()

    def path(self, channel: int, layer: int) -> Path:
        """File that holds one channel's layer."""
        return self._folder / self._images.file_of(channel, layer)

    def label(self, channel: int, layer: int) -> str:
        """What to call it in messages."""
        name = self._images.file_of(channel, layer)
        if self._images.kind == "tiff pages":
            return f"{name}, page {self._images.number(layer)},"
        return name

    def names(self) -> Iterator[str]:
        """Every file that belongs to the stack, as a path inside its folder."""
        if self._images.kind == "tiff pages":
            yield from (self._images.file_of(c, 0) for c in range(self._shape[0]))
            return
        for layer in range(self._images.n_layers):
            yield from self._images.names(layer)

    def file_bytes(self, channel: int, layer: int) -> bytes:
        """One file, or one page of a TIFF, as it is on disk.

        Raises
        ------
        FileFormatError
            If it is missing, cannot be read, is too large, or lies outside the stack's folder.
        """
        path, label = self.path(channel, layer), self.label(channel, layer)
        if not path.resolve().is_relative_to(self._folder.resolve()):
            raise FileFormatError(f"{label} lies outside the stack.")
        if self._images.kind == "tiff pages":
            return self._tiff(channel).strip(self._images.number(layer))
        try:
            size = path.stat().st_size
            if size > self._images.largest:
                raise FileFormatError(
                    f"{label} has {size} bytes; no file of this stack has more than "
                    f"{self._images.largest}."
                )
            return path.read_bytes()
        except OSError as error:
            reason = error.strerror or str(error)
            raise FileFormatError(f"{label} is missing: {reason}.") from None

    def _tiff(self, channel: int) -> TiffPages:
        with self._lock:
            pages = self._pages.get(channel)
            if pages is None:
                path = self.path(channel, 0)
                form, count = self._images.page_format, self._images.n_layers
                pages = self._pages[channel] = TiffPages(path, form, count, path.name)
            return pages

    def is_intact(self, channel: int, layer: int, data: bytes) -> bool:
        """True where `data` has the digest that the manifest states."""
        row = self._digests[0 if self._indexed else channel]
        return hashlib.sha256(data).hexdigest() == row[layer]

    def decode(self, channel: int, layer: int, data: bytes) -> NDArray[np.uint8]:
        """Bits of one channel, 1 for material, checked for size, depth and pitch."""
        label = self.label(channel, layer)
        if not self._indexed:
            plane: NDArray[np.uint8] = self._images.decode(data, label)[0]
            return plane
        last = self._last  # all channels come from one image, so it is decoded once
        if last is None or last[0] != data:
            last = self._last = (data, self._images.decode(data, label))
        return np.array(last[1][channel])

    def examine(self, layer: int) -> ReadLayer:
        """Read a layer and note what is wrong with it instead of raising."""
        found = ReadLayer(np.zeros(self._shape, dtype=np.uint8))
        for channel in range(self._shape[0]):
            try:
                data = self.file_bytes(channel, layer)
                if not self.is_intact(channel, layer, data):
                    found.changed.append(channel)
                found.bits[channel] = self.decode(channel, layer, data)
            except FileFormatError as error:
                found.bad.append((channel, str(error)))
        return found

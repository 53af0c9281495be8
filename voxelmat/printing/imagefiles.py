"""The image files of a stack: which there are, what they hold, and the bits that they give back."""

from __future__ import annotations

import colorsys
import hashlib
from collections.abc import Iterable, Iterator, Sequence
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import FileFormatError, InputError
from voxelmat.io.png import decode_bitmap, decode_indexed, encode_bitmap, encode_indexed
from voxelmat.io.tiff import PageFormat, decode_page, encode_page, write_pages
from voxelmat.kernels.bitplane import count_planes, to_words
from voxelmat.model.profile import PrintProfile
from voxelmat.monitor import Monitor
from voxelmat.printing.imageorder import ImageOrder
from voxelmat.printing.journal import INDEX_FOLDER, LayerRecord
from voxelmat.printing.raster import Raster

__all__ = ["ImageFiles", "palette"]

Planes = Iterable[NDArray[np.uint8]]


def palette(channels: int) -> NDArray[np.uint8]:
    """Colours of an indexed image: white for empty, then one a channel, far apart in hue.

    Returns
    -------
    ndarray of uint8, shape (channels + 1, 3)
    """
    turn = 0.618034  # the golden section keeps any number of hues apart
    colours = [
        colorsys.hsv_to_rgb(k * turn % 1, 0.75, 0.9 - 0.2 * (k % 3)) for k in range(channels)
    ]
    return np.array([(255, 255, 255), *(np.rint(np.multiply(c, 255)) for c in colours)], np.uint8)


class ImageFiles:
    """Encodes and decodes the layers of one stack; safe to use from threads and processes.

    Parameters
    ----------
    window : Raster
        What the images show.
    channels : sequence of str
    profile : PrintProfile

    Attributes
    ----------
    n_layers : int
    kind : str
        One of `voxelmat.model.image.IMAGE_KINDS`.
    """

    def __init__(self, window: Raster, channels: Sequence[str], profile: PrintProfile) -> None:
        self.n_layers = window.image_shape[0]
        self.kind = profile.image.kind
        self._channels = tuple(channels)
        self._order = ImageOrder(window, profile)
        self._upwards = profile.image.layer_order == "up"
        self._ppm = window.pixels_per_metre
        (_, _), (row, _), (column, _) = window.image_axes
        self.page_format = PageFormat(
            width=self._order.width,
            rows=self._order.height,
            pitch_mm=(window.pitch[column], window.pitch[row]),
            compression=profile.image.compression,
            low_first=profile.image.bit_order == "first low",
        )

    # ------------------------------------------------------------------ names
    @property
    def folders(self) -> tuple[str, ...]:
        """Folders that hold the files of layers while they are written."""
        return (INDEX_FOLDER,) if self.kind == "png index" else self._channels

    def number(self, layer: int) -> int:
        """Number of a layer's file or page; layer 0 lies on the tray."""
        return layer if self._upwards else self.n_layers - 1 - layer

    def names(self, layer: int) -> tuple[str, ...]:
        """Files of one layer while they are written, as paths inside the stack's folder."""
        suffix = "page" if self.kind == "tiff pages" else "png"
        return tuple(f"{f}/{self.number(layer):05d}.{suffix}" for f in self.folders)

    def file_of(self, channel: int, layer: int) -> str:
        """File of the finished stack that holds one layer of one channel."""
        if self.kind == "tiff pages":
            return f"{self._channels[channel]}.tif"
        return self.names(layer)[0 if self.kind == "png index" else channel]

    # ------------------------------------------------------------------ writing
    def encode(self, planes: Planes) -> Iterator[bytes]:
        """What the files of one layer hold, in the order of `names`.

        Parameters
        ----------
        planes : iterable of ndarray of uint8, shape (rows, stride)
            The bits of the channels one after another, or an array of them all. Each is let go
            before the next is asked for.
        """
        pixels = (self._order.to_file(p[None])[0] for p in planes)
        if self.kind == "png bitmap":
            return (encode_bitmap(p, self._order.width, self._ppm) for p in pixels)
        if self.kind == "tiff pages":
            return (encode_page(p, self.page_format) for p in pixels)
        return iter([self._encode_index(pixels)])

    def _encode_index(self, pixels: Iterable[NDArray[np.uint8]]) -> bytes:
        numbers = np.zeros((self._order.height, self._order.width), dtype=np.uint8)
        laid = 0
        for channel, plane in enumerate(pixels):
            flat = np.unpackbits(plane, axis=1, count=self._order.width)
            laid += _count(plane)
            flat *= np.uint8(channel + 1)
            numbers |= flat
        if laid != int(np.count_nonzero(numbers)):
            raise InputError("Two channels claim one site, which an indexed image cannot hold.")
        return encode_indexed(numbers, palette(len(self._channels)), self._ppm)

    def write(self, folder: Path, layer: int, planes: Planes) -> LayerRecord:
        """Write the files of one layer and say what they are; `planes` as for `encode`."""
        digests: list[str] = []
        count: list[int] = []

        def counted() -> Iterator[NDArray[np.uint8]]:
            for plane in planes:
                count.append(_count(plane))
                yield plane

        for name, data in zip(self.names(layer), self.encode(counted()), strict=True):
            (folder / name).write_bytes(data)
            digests.append(hashlib.sha256(data).hexdigest())
        return LayerRecord(layer, tuple(digests), tuple(count))

    def assemble(self, folder: Path, monitor: Monitor) -> None:
        """Put the pages of each channel into one file; the pages stay until `tidy`.

        For a moment the stack is on disk twice; what is interrupted can be done again.
        """
        if self.kind != "tiff pages":
            return
        layers = sorted(range(self.n_layers), key=self.number)
        for channel, name in enumerate(self._channels):
            pages = [folder / self.names(layer)[channel] for layer in layers]
            sizes = [page.stat().st_size for page in pages]
            strips = (page.read_bytes() for page in pages)
            write_pages(folder / f"{name}.tif", strips, sizes, self.page_format)
            monitor.report("joining pages", done=channel + 1, total=len(self._channels))

    def tidy(self, folder: Path) -> None:
        """Remove the single pages that `assemble` has joined."""
        if self.kind != "tiff pages":
            return
        for name in self._channels:
            for page in (folder / name).iterdir():
                page.unlink()
            (folder / name).rmdir()

    # ------------------------------------------------------------------ reading
    @property
    def largest(self) -> int:
        """Bytes that no file or page of one layer exceeds."""
        width = self._order.width if self.kind == "png index" else self.page_format.stride
        return 2 * self._order.height * (width + 1) + (1 << 16)

    def decode(self, data: bytes, name: str) -> NDArray[np.uint8]:
        """The bits of one file or page.

        Parameters
        ----------
        data : bytes
        name : str
            Named in errors.

        Returns
        -------
        ndarray of uint8, shape (planes, rows, stride)
            All channels from an indexed image, else one.

        Raises
        ------
        FileFormatError
            If it is damaged, or not of the size, depth, kind and pitch that it should be.
        """
        size = (self._order.width, self._order.height)
        if self.kind == "tiff pages":
            return self._order.from_file(decode_page(data, self.page_format, name)[None], name)
        if self.kind == "png bitmap":
            bitmap = decode_bitmap(data, name, size)
            self._check_pitch(bitmap.pixels_per_metre, name)
            return self._order.from_file(bitmap.bits[None], name)
        numbers, ppm = decode_indexed(data, name, size, len(self._channels) + 1)
        self._check_pitch(ppm, name)
        planes = [np.packbits(numbers == m + 1, axis=1) for m in range(len(self._channels))]
        return self._order.from_file(np.stack(planes), name)

    def _check_pitch(self, ppm: tuple[int, int] | None, name: str) -> None:
        if ppm != self._ppm:
            raise FileFormatError(f"{name} states {ppm} pixels a metre; it should be {self._ppm}.")


def _count(plane: NDArray[np.uint8]) -> int:
    """Set bits of one channel."""
    count = np.zeros(1, dtype=np.int64)
    words = np.empty((len(plane), (plane.shape[1] + 7) // 8), dtype=np.uint64)
    to_words(plane, words)
    count_planes(words[None], count)
    return int(count[0])

"""From the bits of a layer to the pixels of its file, and back: passes, rows, padding, polarity."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import FileFormatError
from voxelmat.model.image import ImageLayout
from voxelmat.model.profile import PrintProfile
from voxelmat.printing.raster import Raster

__all__ = ["ImageOrder", "encoder_words", "swath_sites"]

Bits = NDArray[np.uint8]


def swath_sites(window: Raster, profile: PrintProfile) -> int | None:
    """Sites along tray y of one swath whose passes are mirrored in turn; None where none are."""
    if not profile.image.mirrored_passes:
        return None
    return max(1, round(profile.process.swath_mm / float(window.pitch[1])))


def encoder_words(layout: ImageLayout) -> str:
    """How images are encoded, for the manifest."""
    if layout.kind == "png bitmap":
        return "one-bit PNG, filter 0, deflate level 1"
    if layout.kind == "png index":
        return "8-bit indexed PNG, filter 0, deflate level 1"
    coding = "Group 4" if layout.compression == "g4" else "deflate level 1"
    return f"one-bit TIFF of many pages, {coding}, {layout.bit_order} in a byte"


class ImageOrder:
    """How the bits of one window lie in its image files.

    Parameters
    ----------
    window : Raster
    profile : PrintProfile

    Attributes
    ----------
    width, height : int
        Pixels of a file, padding included.
    """

    def __init__(self, window: Raster, profile: PrintProfile) -> None:
        _, self._rows, self._columns = window.image_shape
        pad_rows, pad_columns = profile.image.pad_to
        self.height = -(-self._rows // pad_rows) * pad_rows
        self.width = -(-self._columns // pad_columns) * pad_columns
        self._up = profile.image.row_order == "up"
        self._inverted = profile.polarity == "black is material"
        self._swath = swath_sites(window, profile)
        self._rows_along_x = window.row_direction == "x"
        _, self._row0, self._column0 = window.image_offset
        self._stride = (self._columns + 7) // 8
        self._padded = (self.height, self.width) != (self._rows, self._columns)

    def to_file(self, bits: Bits) -> Bits:
        """Pixels of files, packed, 1 for white, from the bits of planes.

        Parameters
        ----------
        bits : ndarray of uint8, shape (planes, rows, stride)

        Returns
        -------
        ndarray of uint8, shape (planes, height, ceil(width / 8))
        """
        out = self._mirrored(bits)
        if self._up:
            out = out[:, ::-1]
        if self._padded:
            padded = np.zeros((len(bits), self.height, (self.width + 7) // 8), dtype=np.uint8)
            padded[:, : self._rows, : self._stride] = out
            out = padded
        return ~out if self._inverted else out

    def from_file(self, pixels: Bits, name: str) -> Bits:
        """The inverse of `to_file`.

        Raises
        ------
        FileFormatError
            If a site of the padding is not empty.
        """
        out = ~pixels if self._inverted else pixels
        if self.width % 8:
            out[:, :, -1] &= _first(self.width % 8)
        if self._padded:
            inside = out[:, : self._rows, : self._stride].copy()
            outside = out[:, self._rows :].any() or out[:, :, self._stride :].any()
            if self._columns % 8:
                last = _first(self._columns % 8)
                outside = outside or (inside[:, :, -1] & ~last).any()
                inside[:, :, -1] &= last
            if outside:
                raise FileFormatError(f"{name} holds droplets in the padding of its image.")
            out = inside
        if self._up:
            out = out[:, ::-1]
        return np.ascontiguousarray(self._mirrored(out))

    def _mirrored(self, bits: Bits) -> Bits:
        """Every second swath reversed along tray x; its own inverse."""
        if self._swath is None:
            return bits
        out = bits.copy()
        if self._rows_along_x:
            odd = (self._row0 + np.arange(self._rows)) // self._swath % 2 == 1
            pixels = np.unpackbits(bits[:, odd], axis=2, count=self._columns)
            out[:, odd] = np.packbits(pixels[:, :, ::-1], axis=2)
            return out
        odd = (self._column0 + np.arange(self._columns)) // self._swath % 2 == 1
        for plane, turned in zip(bits, out, strict=True):
            pixels = np.unpackbits(plane, axis=1, count=self._columns)
            pixels[:, odd] = pixels[::-1, odd]
            turned[:] = np.packbits(pixels, axis=1)
        return out


def _first(pixels: int) -> np.uint8:
    """A byte with its first `pixels` bits set."""
    return np.uint8((0xFF00 >> pixels) & 0xFF)

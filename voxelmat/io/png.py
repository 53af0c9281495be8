"""One-bit and indexed PNG images with a true physical pitch: a minimal, strict writer and reader.

Follows the Portable Network Graphics specification (W3C Recommendation, second edition, 2003),
sections 11.2.2 (IHDR), 11.2.3 (PLTE), 11.3.5.3 (pHYs) and 9 (filtering; only filter 0 is used).
"""

from __future__ import annotations

import struct
import zlib
from dataclasses import dataclass
from typing import Any

import numpy as np
from isal import isal_zlib
from numpy.typing import NDArray

from voxelmat.errors import FileFormatError, InputError

__all__ = [
    "Bitmap",
    "decode_bitmap",
    "decode_indexed",
    "deflated",
    "encode_bitmap",
    "encode_indexed",
]

_SIGNATURE = b"\x89PNG\r\n\x1a\n"
_PIECE = 1 << 16  # bytes
_LARGEST = 1 << 20  # sites along one side; far beyond any tray, far below any overflow


@dataclass(frozen=True, slots=True, eq=False)
class Bitmap:
    """A decoded bitmap.

    Attributes
    ----------
    bits : ndarray of uint8, shape (rows, ceil(width / 8))
        Eight pixels a byte, the leftmost in the highest bit; padding bits are 0.
    width : int
        Pixels a row.
    pixels_per_metre : tuple of int or None
        Along x and y, from the pHYs chunk.
    """

    bits: NDArray[np.uint8]
    width: int
    pixels_per_metre: tuple[int, int] | None


def _chunk(kind: bytes, data: bytes) -> bytes:
    code = zlib.crc32(data, zlib.crc32(kind))
    return struct.pack(">I", len(data)) + kind + data + struct.pack(">I", code)


def deflated(raw: NDArray[np.uint8], packer: Any) -> bytes:
    """Compress, piece by piece; the same input gives the same bytes in any thread and process.

    Given more than 64 KiB at once, isal starts from memory that nobody has cleared: its choice of
    matches, and with it the file's digest, then changes now and then, once in some thousand files.
    """
    flat = raw.reshape(-1)
    pieces = [packer.compress(flat[i : i + _PIECE].data) for i in range(0, flat.size, _PIECE)]
    return b"".join(pieces) + bytes(packer.flush())


def _deflate(raw: NDArray[np.uint8]) -> bytes:
    """Compress for a PNG."""
    return deflated(raw, isal_zlib.compressobj(1))


def encode_bitmap(bits: NDArray[np.uint8], width: int, pixels_per_metre: tuple[int, int]) -> bytes:
    """Encode packed rows as a one-bit greyscale PNG.

    Parameters
    ----------
    bits : ndarray of uint8, shape (rows, ceil(width / 8))
        As in `Bitmap`; 1 is white.
    width : int
        Pixels a row.
    pixels_per_metre : tuple of int
        Along x and y, for the pHYs chunk.

    Returns
    -------
    bytes
        The whole file; the same input gives the same bytes.

    Raises
    ------
    InputError
        If shape and width do not agree.
    """
    rows, stride = bits.shape
    if not (1 <= rows <= _LARGEST and 1 <= width <= _LARGEST and stride == (width + 7) // 8):
        raise InputError(f"A bitmap {width} pixels wide does not fit rows of shape {bits.shape}.")
    return _file(bits, (width, 1, 0), b"", pixels_per_metre)


def _file(
    table: NDArray[np.uint8],
    kind: tuple[int, int, int],
    palette: bytes,
    pixels_per_metre: tuple[int, int],
) -> bytes:
    """A whole file; `kind` is width, depth and colour type, `palette` empty for greyscale."""
    raw = np.zeros((len(table), table.shape[1] + 1), dtype=np.uint8)  # column 0: no filter
    raw[:, 1:] = table
    width, depth, colour = kind
    header = struct.pack(">IIBBBBB", width, len(table), depth, colour, 0, 0, 0)
    return b"".join(
        (
            _SIGNATURE,
            _chunk(b"IHDR", header),
            *([_chunk(b"PLTE", palette)] if palette else []),
            _chunk(b"pHYs", struct.pack(">IIB", *pixels_per_metre, 1)),
            _chunk(b"IDAT", _deflate(raw)),
            _chunk(b"IEND", b""),
        )
    )


def encode_indexed(
    pixels: NDArray[np.uint8], palette: NDArray[np.uint8], pixels_per_metre: tuple[int, int]
) -> bytes:
    """Encode numbers as an 8-bit indexed-colour PNG.

    Parameters
    ----------
    pixels : ndarray of uint8, shape (rows, columns)
    palette : ndarray of uint8, shape (n, 3)
        Red, green, blue of each number that may occur.
    pixels_per_metre : tuple of int
        Along x and y, for the pHYs chunk.

    Raises
    ------
    InputError
        If a number is beyond the palette, or the size is not possible.
    """
    rows, width = pixels.shape
    if not (1 <= rows <= _LARGEST and 1 <= width <= _LARGEST):
        raise InputError(f"An image of {width} x {rows} pixels is not possible.")
    if not 1 <= len(palette) <= 256 or int(pixels.max()) >= len(palette):
        raise InputError(f"A palette of {len(palette)} colours does not fit the image's numbers.")
    return _file(pixels, (width, 8, 3), palette.astype(np.uint8).tobytes(), pixels_per_metre)


def _chunks(data: bytes, name: str) -> list[tuple[bytes, bytes]]:
    """All chunks up to IEND, each checked against its CRC."""
    if not data.startswith(_SIGNATURE):
        raise FileFormatError(f"{name} is not a PNG file.")
    found: list[tuple[bytes, bytes]] = []
    at = len(_SIGNATURE)
    while not found or found[-1][0] != b"IEND":
        if at + 12 > len(data):
            raise FileFormatError(f"{name} is cut short: it has {len(data)} bytes and no end.")
        (size,) = struct.unpack_from(">I", data, at)
        end = at + 8 + size
        if end + 4 > len(data):
            raise FileFormatError(f"{name} is cut short inside a chunk of {size} bytes.")
        if struct.unpack_from(">I", data, end)[0] != zlib.crc32(data[at + 4 : end]):
            raise FileFormatError(f"{name} is damaged: a chunk does not match its check sum.")
        found.append((data[at + 4 : at + 8], data[at + 8 : end]))
        at = end + 4
    return found


def _inflate(packed: bytes, size: int, name: str) -> bytes:
    """Exactly `size` bytes; never inflates more than that."""
    engine = isal_zlib.decompressobj()
    try:
        raw = engine.decompress(packed, size + 1)
    except isal_zlib.error as error:  # type: ignore[misc]
        raise FileFormatError(f"{name} is damaged: {error}.") from None
    if len(raw) != size:
        raise FileFormatError(f"{name} does not hold the {size} bytes that its header states.")
    return bytes(raw)


def decode_bitmap(
    data: bytes, name: str = "The bitmap", size: tuple[int, int] | None = None
) -> Bitmap:
    """Decode a one-bit greyscale PNG without row filters, as `encode_bitmap` writes them.

    Parameters
    ----------
    data : bytes
        The whole file.
    name : str
        Named in errors.
    size : tuple of int, optional
        Width and rows that the image must have; checked before anything is inflated.

    Raises
    ------
    FileFormatError
        If the file is damaged, cut short, of another size, depth or kind, or filtered.
    """
    chunks = _chunks(data, name)
    width, rows = _header(chunks, (1, 0), "one-bit greyscale", size, name)
    bits = _rows(chunks, rows, (width + 7) // 8, name)
    if width % 8:
        bits[:, -1] &= np.uint8((0xFF00 >> (width % 8)) & 0xFF)
    return Bitmap(bits, width, _pitch(chunks))


def decode_indexed(
    data: bytes, name: str, size: tuple[int, int], numbers: int
) -> tuple[NDArray[np.uint8], tuple[int, int] | None]:
    """Decode an 8-bit indexed PNG without row filters, as `encode_indexed` writes them.

    Parameters
    ----------
    data : bytes
        The whole file.
    name : str
        Named in errors.
    size : tuple of int
        Width and rows that the image must have; checked before anything is inflated.
    numbers : int
        How many numbers may occur, from 0.

    Returns
    -------
    ndarray of uint8, shape (rows, columns)
    tuple of int or None
        Pixels a metre along x and y.

    Raises
    ------
    FileFormatError
        If the file is damaged, cut short, of another size, depth or kind, or filtered, or if a
        number is too high.
    """
    chunks = _chunks(data, name)
    width, rows = _header(chunks, (8, 3), "8-bit indexed", size, name)
    pixels = _rows(chunks, rows, width, name)
    highest = int(pixels.max())
    if highest >= numbers:
        raise FileFormatError(f"{name} holds the number {highest}; the highest is {numbers - 1}.")
    return pixels, _pitch(chunks)


def _header(
    chunks: list[tuple[bytes, bytes]],
    kind: tuple[int, int],
    words: str,
    size: tuple[int, int] | None,
    name: str,
) -> tuple[int, int]:
    """Width and rows of an image whose depth and colour type are `kind`."""
    if chunks[0][0] != b"IHDR" or len(chunks[0][1]) != 13:
        raise FileFormatError(f"{name} does not begin with a header.")
    width, rows, depth, colour, _, _, interlace = struct.unpack(">IIBBBBB", chunks[0][1])
    if (depth, colour, interlace) != (*kind, 0):
        raise FileFormatError(
            f"{name} must be a {words} PNG without interlace; it has depth {depth}, "
            f"colour type {colour}, interlace {interlace}."
        )
    if not (1 <= width <= _LARGEST and 1 <= rows <= _LARGEST):
        raise FileFormatError(f"{name} states a size of {width} x {rows} pixels.")
    if size is not None and (width, rows) != size:
        raise FileFormatError(
            f"{name} is {width} x {rows} pixels; it should be {size[0]} x {size[1]}."
        )
    return width, rows


def _rows(
    chunks: list[tuple[bytes, bytes]], rows: int, stride: int, name: str
) -> NDArray[np.uint8]:
    """The rows of an image, uint8 (rows, stride)."""
    packed = b"".join(content for kind, content in chunks if kind == b"IDAT")
    raw = _inflate(packed, rows * (stride + 1), name)
    table = np.frombuffer(raw, dtype=np.uint8).reshape(rows, stride + 1)
    if table[:, 0].any():
        raise FileFormatError(
            f"{name} uses row filters, so other software has saved it; write the stack again."
        )
    return table[:, 1:].copy()


def _pitch(chunks: list[tuple[bytes, bytes]]) -> tuple[int, int] | None:
    """Pixels a metre, where the file states them."""
    pitch = next((c for k, c in chunks if k == b"pHYs" and len(c) == 9 and c[8] == 1), None)
    return None if pitch is None else struct.unpack(">II", pitch[:8])

"""One-bit TIFF files of many pages with a true physical pitch: a strict writer and reader.

Follows TIFF revision 6.0 (1992) with the 64-bit offsets of BigTIFF where a file needs them. Each
page is one strip: deflated (compression 8) or Group 4 (ITU-T T.6, compression 4).
"""

from __future__ import annotations

import struct
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass
from fractions import Fraction
from io import BytesIO
from pathlib import Path
from typing import BinaryIO

import numpy as np
from isal import isal_zlib
from numpy.typing import NDArray

from voxelmat.errors import FileFormatError, InputError
from voxelmat.io.png import deflated

__all__ = ["PageFormat", "TiffPages", "decode_page", "encode_page", "write_pages"]

_COMPRESSION = {"deflate": 8, "g4": 4}
_TYPES = {3: "H", 4: "I", 5: "II", 16: "Q"}  # SHORT, LONG, RATIONAL, LONG8
_BIG_FROM = (1 << 32) - (1 << 24)  # bytes; offsets of a classic file have 32 bits
_LARGEST = 1 << 20  # sites along one side, as for PNG
_REVERSED = np.packbits(
    np.unpackbits(np.arange(256, dtype=np.uint8)[:, None], axis=1, bitorder="little"), axis=1
).ravel()

Tag = tuple[int, tuple[int, ...]]  # type and values


@dataclass(frozen=True, slots=True, kw_only=True)
class PageFormat:
    """What all pages of a file share.

    Attributes
    ----------
    width, rows : int
        Pixels.
    pitch_mm : tuple of Fraction
        Between columns and between rows; written as exact pixels a centimetre.
    compression : str
        "deflate" or "g4".
    low_first : bool
        Codes run from the lowest bit of each byte (FillOrder 2); only with "g4".
    """

    width: int
    rows: int
    pitch_mm: tuple[Fraction, Fraction]
    compression: str = "deflate"
    low_first: bool = False

    def __post_init__(self) -> None:
        if not (1 <= self.width <= _LARGEST and 1 <= self.rows <= _LARGEST):
            raise InputError(f"No page has {self.width} x {self.rows} pixels.")
        if self.compression not in _COMPRESSION:
            raise InputError(f"A page is deflated or g4; got {self.compression!r}.")
        if self.low_first and self.compression != "g4":
            raise InputError("Only g4 pages can run from the lowest bit.")

    @property
    def stride(self) -> int:
        """Bytes a row."""
        return (self.width + 7) // 8

    def tags(self, page: int, pages: int, size: int, offset: int, *, big: bool) -> dict[int, Tag]:
        """The tags of one page, in ascending order."""
        x, y = (Fraction(10) / p for p in self.pitch_mm)
        where = 16 if big else 4
        found: dict[int, Tag] = {
            254: (4, (2,)),  # a page of several
            256: (4, (self.width,)),
            257: (4, (self.rows,)),
            258: (3, (1,)),
            259: (3, (_COMPRESSION[self.compression],)),
            262: (3, (1,)),  # 0 is black
            266: (3, (2 if self.low_first else 1,)),
            273: (where, (offset,)),
            277: (3, (1,)),
            278: (4, (self.rows,)),
            279: (where, (size,)),
            282: (5, (x.numerator, x.denominator)),
            283: (5, (y.numerator, y.denominator)),
            296: (3, (3,)),  # centimetre
        }
        if pages <= 0xFFFF:
            found[297] = (3, (page, pages))
        return found


def encode_page(bits: NDArray[np.uint8], form: PageFormat) -> bytes:
    """The strip of one page; the same input gives the same bytes.

    Parameters
    ----------
    bits : ndarray of uint8, shape (rows, ceil(width / 8))
        The first pixel of a row in the highest bit; 1 is white.
    form : PageFormat
    """
    if bits.shape != (form.rows, form.stride):
        raise InputError(f"A page of {form.width} x {form.rows} does not fit {bits.shape} bytes.")
    if form.compression == "deflate":
        return deflated(np.ascontiguousarray(bits), isal_zlib.compressobj(1))
    strip = _group4(bits, form)
    return _REVERSED[np.frombuffer(strip, np.uint8)].tobytes() if form.low_first else strip


def _group4(bits: NDArray[np.uint8], form: PageFormat) -> bytes:
    """One strip of Group 4 codes, by Pillow's libtiff."""
    from PIL import Image

    image = Image.frombytes("1", (form.width, form.rows), np.ascontiguousarray(bits).tobytes())
    out = BytesIO()
    image.save(out, format="TIFF", compression="group4", tiffinfo={278: form.rows})
    data = out.getvalue()
    offset = struct.unpack_from("<I", data, 4)[0]
    tags, _ = _directory(BytesIO(data), offset, big=False, name="A page just made")
    if len(tags[273][1]) != 1:
        raise FileFormatError("This Pillow writes Group 4 in several strips; update it.")
    start, size = tags[273][1][0], tags[279][1][0]
    return data[start : start + size]


def decode_page(strip: bytes, form: PageFormat, name: str = "The page") -> NDArray[np.uint8]:
    """Bits of one strip, padding bits 0; never inflates more than the page holds.

    Group 4 has no check sum, and libtiff makes what it can of wrong codes, so compare the
    strip's digest before you trust its pixels.

    Raises
    ------
    FileFormatError
        If the strip is damaged or holds another number of bytes.
    """
    size = form.rows * form.stride
    if form.compression == "deflate":
        engine = isal_zlib.decompressobj()
        try:
            raw = engine.decompress(strip, size + 1)
        except isal_zlib.error as error:  # type: ignore[misc]
            raise FileFormatError(f"{name} is damaged: {error}.") from None
    else:
        raw = _from_group4(strip, form, name)
    if len(raw) != size:
        raise FileFormatError(f"{name} does not hold the {size} bytes of its size.")
    bits = np.frombuffer(raw, np.uint8).reshape(form.rows, form.stride).copy()
    if form.width % 8:
        bits[:, -1] &= np.uint8((0xFF00 >> (form.width % 8)) & 0xFF)
    return bits


def _from_group4(strip: bytes, form: PageFormat, name: str) -> bytes:
    """Decode by Pillow's libtiff; the size is ours, so that no file can ask for more."""
    from PIL import TiffImagePlugin

    out = BytesIO()
    _write(out, [strip], [len(strip)], form, big=False)
    out.seek(0)
    try:
        with TiffImagePlugin.TiffImageFile(out) as image:
            return image.tobytes()
    except (OSError, ValueError, SyntaxError) as error:
        raise FileFormatError(f"{name} is damaged: {error}.") from None


def write_pages(
    path: Path,
    strips: Iterable[bytes],
    sizes: Sequence[int],
    form: PageFormat,
    *,
    big: bool | None = None,
) -> None:
    """Write a whole file, one strip in memory at a time.

    Parameters
    ----------
    path : Path
    strips : iterable of bytes
        As `encode_page` makes them, first page first.
    sizes : sequence of int
        Bytes of each strip.
    form : PageFormat
    big : bool, optional
        64-bit offsets; where left out, for files of 4 GB and more.
    """
    if big is None:
        big = sum(sizes) + 512 * len(sizes) >= _BIG_FROM
    with path.open("wb") as handle:
        _write(handle, strips, sizes, form, big=big)


def _write(
    handle: BinaryIO, strips: Iterable[bytes], sizes: Sequence[int], form: PageFormat, *, big: bool
) -> None:
    """Header, strips, then all directories in a row."""
    start = 16 if big else 8
    offsets = []
    for size in sizes:
        offsets.append(start)
        start += size + size % 2
    head = struct.pack("<2sHHHQ", b"II", 43, 8, 0, start) if big else None
    handle.write(head or struct.pack("<2sHI", b"II", 42, start))
    for strip, size in zip(strips, sizes, strict=True):
        if len(strip) != size:
            raise FileFormatError(f"A page has {len(strip)} bytes and not {size}.")
        handle.write(strip + b"\0" * (size % 2))
    for page, (size, offset) in enumerate(zip(sizes, offsets, strict=True)):
        tags = form.tags(page, len(sizes), size, offset, big=big)
        block = _pack(tags, start, last=page == len(sizes) - 1, big=big)
        handle.write(block)
        start += len(block)


def _pack(tags: dict[int, Tag], at: int, *, last: bool, big: bool) -> bytes:
    """One directory that lies at `at` and is followed by the next one."""
    count, entry, room, word = ("<Q", "<HHQ", 8, "<Q") if big else ("<H", "<HHI", 4, "<I")
    fixed = struct.calcsize(count) + len(tags) * (struct.calcsize(entry) + room) + room
    body, tail = struct.pack(count, len(tags)), b""
    for tag, (kind, values) in tags.items():
        letters = _TYPES[kind]
        number = len(values) // len(letters)
        data = struct.pack("<" + letters * number, *values)
        if len(data) > room:
            reference = struct.pack(word, at + fixed + len(tail))
            tail += data
            data = reference
        body += struct.pack(entry, tag, kind, number) + data.ljust(room, b"\0")
    following = 0 if last else at + fixed + len(tail)
    return body + struct.pack(word, following) + tail


def _directory(handle: BinaryIO, at: int, *, big: bool, name: str) -> tuple[dict[int, Tag], int]:
    """Tags of the directory at `at`, and where the next one lies (0 for none)."""
    count, entry, room, word = ("<Q", "<HHQ", 8, "<Q") if big else ("<H", "<HHI", 4, "<I")

    def read(size: int) -> bytes:
        data = handle.read(size)
        if len(data) != size:
            raise FileFormatError(f"{name} is cut short in a page directory.")
        return data

    handle.seek(at)
    (number,) = struct.unpack(count, read(struct.calcsize(count)))
    if number > 64:
        raise FileFormatError(f"{name} has a page directory of {number} tags.")
    step = struct.calcsize(entry) + room
    body = read(number * step + room)
    tags: dict[int, Tag] = {}
    for n in range(number):
        tag, kind, values = struct.unpack_from(entry, body, n * step)
        letters = _TYPES.get(kind, "")
        if not letters or values > 64:
            continue
        size = struct.calcsize("<" + letters) * values
        data = body[n * step + step - room : n * step + step]
        if size > room:
            handle.seek(struct.unpack(word, data)[0])
            data = read(size)
        tags[tag] = (kind, struct.unpack_from("<" + letters * values, data))
    return tags, struct.unpack(word, body[-room:])[0]


class TiffPages:
    """The pages of one file, found once, read when asked for; safe to use from threads.

    Parameters
    ----------
    path : Path
    form : PageFormat
        What every page must be; anything else is refused before it is decoded.
    pages : int
        How many there must be.
    name : str
        Named in errors.

    Raises
    ------
    FileFormatError
        If the file is missing, or is not one that `write_pages` wrote with these arguments.
    """

    def __init__(self, path: Path, form: PageFormat, pages: int, name: str) -> None:
        self._path, self._form, self._name = path, form, name
        try:
            with path.open("rb") as handle:
                self._places = list(self._find(handle, pages))
        except OSError as error:
            raise FileFormatError(f"{name} is missing: {error.strerror or error}.") from None

    def _find(self, handle: BinaryIO, pages: int) -> Iterator[tuple[int, int]]:
        """Offset and size of each strip."""
        name = self._name
        head = handle.read(16)
        big = head[:8] == struct.pack("<2sHHH", b"II", 43, 8, 0)
        if len(head) < 8 or not (big or head[:4] == struct.pack("<2sH", b"II", 42)):
            raise FileFormatError(f"{name} is not a TIFF file in little-endian order.")
        at = struct.unpack_from("<Q" if big else "<I", head, 8 if big else 4)[0]
        for page in range(pages):
            if not at:
                raise FileFormatError(f"{name} has {page} pages; the manifest states {pages}.")
            tags, at = _directory(handle, at, big=big, name=name)
            try:
                offset, size = tags[273][1][0], tags[279][1][0]
            except (KeyError, IndexError):
                raise FileFormatError(f"{name}: page {page} does not say where it lies.") from None
            wanted = self._form.tags(page, pages, size, offset, big=big)
            for tag in {**wanted, **tags}:
                if wanted.get(tag) != tags.get(tag):
                    raise FileFormatError(
                        f"{name}: page {page} has other data in tag {tag} than the manifest "
                        f"asks for: {tags.get(tag)} and not {wanted.get(tag)}."
                    )
            if size > 2 * self._form.rows * self._form.stride + (1 << 16):
                raise FileFormatError(f"{name}: page {page} has {size} bytes, too many.")
            yield offset, size
        if at:
            raise FileFormatError(f"{name} has more than the {pages} pages of the manifest.")

    def strip(self, page: int) -> bytes:
        """The strip of one page as it is on disk."""
        offset, size = self._places[page]
        try:
            with self._path.open("rb") as handle:
                handle.seek(offset)
                data = handle.read(size)
        except OSError as error:
            raise FileFormatError(f"{self._name} cannot be read: {error}.") from None
        if len(data) != size:
            raise FileFormatError(f"{self._name} is cut short in page {page}.")
        return data

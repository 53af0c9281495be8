"""Limits of volume files, judged by what their heads state before anything is allocated."""

from __future__ import annotations

import importlib
import math
import re
import zlib
from collections.abc import Sequence
from pathlib import Path
from typing import Any, BinaryIO
from xml.etree import ElementTree

from voxelmat.errors import FileFormatError, InputError

__all__ = ["MAX_BYTES", "bounded_inflate", "check_size", "check_whole", "needed", "parse_xml"]

#: Most bytes that the values of a volume file may take in memory.
MAX_BYTES = 1 << 32
#: Deflate cannot pack better than this (zlib's technical details: 1032 to 1).
_DEFLATE_RATIO = 1040


def needed(module: str, package: str) -> Any:
    """Import an optional library; say how to get it where it is missing."""
    try:
        return importlib.import_module(module)
    except ImportError as error:
        raise InputError(
            f"This format needs the package '{package}', which is not installed. Install it with: "
            'pip install "voxelmat[formats]"'
        ) from error


def parse_xml(text: bytes, file: str) -> ElementTree.Element:
    """The root of an XML text; entities, which can grow without bound, are refused.

    Raises
    ------
    FileFormatError
        Where it is no whole XML text in UTF-8, or defines a document type or entities.
    """
    if text[:2] in (b"\xff\xfe", b"\xfe\xff") or b"\0" in text[:64]:
        raise FileFormatError(f"{file} is not UTF-8 text.")
    if re.search(rb"<!(DOCTYPE|ENTITY)", text):
        raise FileFormatError(f"{file} defines XML entities, which the format does not need.")
    try:
        return ElementTree.fromstring(text)
    except (ElementTree.ParseError, ValueError, LookupError) as error:
        raise FileFormatError(f"{file} is damaged or cut short ({error}).") from error


def check_size(file: str, shape: Sequence[int], itemsize: int) -> int:
    """Bytes of an array of that shape.

    Raises
    ------
    FileFormatError
        Where an axis is empty, or the array would take more than `MAX_BYTES`.
    """
    if not shape or any(int(n) < 1 for n in shape):
        raise FileFormatError(f"{file} states a size of {tuple(shape)}; each axis needs a voxel.")
    size = math.prod(int(n) for n in shape) * itemsize
    if size > MAX_BYTES:
        raise FileFormatError(
            f"{file} states {' x '.join(map(str, shape))} values, {size / 2**30:.1f} GiB; at most "
            f"{MAX_BYTES / 2**30:.0f} GiB are read. Crop it, or use larger voxels."
        )
    return size


def check_whole(file: Path, size: int, *, packed: bool, start: int = 0) -> None:
    """Refuse a file that is too short to hold what its head states."""
    held = file.stat().st_size - start
    if (held * _DEFLATE_RATIO if packed else held) < size:
        raise FileFormatError(
            f"{file.name} is cut short or its head is false: it states {size} bytes of values and "
            f"holds {held}{' packed' if packed else ''}."
        )


def bounded_inflate(handle: BinaryIO, size: int, file: str, *, window: int = 31) -> bytearray:
    """Exactly `size` bytes of a gzip (window 31) or zlib (15) stream, and never more.

    Raises
    ------
    FileFormatError
        Where the stream is damaged, ends before or goes on after `size` bytes.
    """
    engine = zlib.decompressobj(window)
    out = bytearray()
    try:
        while not engine.eof:
            data = engine.unconsumed_tail or handle.read(1 << 20)
            if not data:
                break
            out += engine.decompress(data, min(1 << 24, size + 1 - len(out)))
            if len(out) > size:
                raise FileFormatError(f"{file} unpacks to more than the {size} bytes it states.")
    except zlib.error as error:
        raise FileFormatError(f"{file} is damaged: {error}.") from error
    if len(out) != size or not engine.eof:
        raise FileFormatError(
            f"{file} is cut short: it unpacks to {len(out)} of the {size} bytes that it states."
        )
    return out

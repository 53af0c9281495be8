"""Reads a volume from VTI, the open XML image-data format, as this and other programs write it.

Values are read from cell data (a number a voxel) or, where there is none, from point data (each
point is then the centre of a voxel). Inline, appended and base64 values; packed with zlib or not.
"""

from __future__ import annotations

import base64
import binascii
import re
import zlib
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import FileFormatError, InputError, ResourceError
from voxelmat.io.axes import millimetres, straighten
from voxelmat.io.label_table import KEY, LabelTable, labelled, parse_table, read_beside
from voxelmat.io.volume_limits import MAX_BYTES, check_size, parse_xml
from voxelmat.model.part import DISTANCE_STEPS
from voxelmat.model.volume import Volume

__all__ = ["read_vti"]

_TYPES = {
    "UInt8": "u1", "UInt16": "u2", "UInt32": "u4", "UInt64": "u8", "Int8": "i1", "Int16": "i2",
    "Int32": "i4", "Int64": "i8", "Float32": "f4", "Float64": "f8",
}  # fmt: skip
_LABEL_NAMES = ("label", "labels")


@dataclass(frozen=True, slots=True)
class _File:
    """The XML head, the appended bytes after it, and how values are packed."""

    name: str
    root: Any
    appended: bytes
    encoded: bool
    order: str
    counter: np.dtype[Any]
    packed: bool

    def array(self, node: Any, count: int) -> NDArray[Any]:
        """`count` values of a DataArray."""
        kind = node.get("type", "")
        if kind not in _TYPES:
            raise InputError(f"Values of type '{kind}' are not read.", file=self.name)
        dtype = np.dtype(self.order + _TYPES[kind])
        size = check_size(self.name, (count,), dtype.itemsize)
        form = node.get("format", "ascii")
        if form == "ascii":
            return self._words(node, count, dtype)
        if form == "appended":
            try:
                data = self.appended[int(node.get("offset", "0")) :]
            except ValueError as error:
                raise FileFormatError(f"{self.name}: an offset is damaged.") from error
            raw = self._unpack(data, self.encoded, size)
        elif form == "binary":
            raw = self._unpack((node.text or "").strip().encode(), True, size)
        else:
            raise FileFormatError(f"{self.name}: values in the form '{form}' are not read.")
        return np.frombuffer(raw, dtype=dtype)

    def _words(self, node: Any, count: int, dtype: np.dtype[Any]) -> NDArray[Any]:
        words = (node.text or "").split()
        if len(words) != count:
            raise FileFormatError(
                f"{self.name}: {count} values are needed, {len(words)} are there."
            )
        try:
            return np.array([float(w) for w in words]).astype(dtype)
        except ValueError as error:
            raise FileFormatError(f"{self.name}: a value is no number ({error}).") from error

    def _take(self, data: bytes, at: int, size: int, encoded: bool) -> tuple[bytes, int]:
        """`size` bytes from `at`, and where they end; base64 is decoded piece by piece."""
        length = (size + 2) // 3 * 4 if encoded else size
        piece = data[at : at + length]
        if len(piece) < length:
            raise FileFormatError(f"{self.name} is cut short: {size} bytes are stated at {at}.")
        try:
            return (base64.b64decode(piece, validate=True) if encoded else piece), at + length
        except binascii.Error as error:
            raise FileFormatError(f"{self.name}: values are damaged ({error}).") from error

    def _numbers(self, data: bytes, at: int, count: int, encoded: bool) -> tuple[list[int], int]:
        raw, end = self._take(data, at, count * self.counter.itemsize, encoded)
        return [int(n) for n in np.frombuffer(raw, self.counter, count)], end

    def _unpack(self, data: bytes, encoded: bool, size: int) -> bytes:
        if not self.packed:
            width = self.counter.itemsize
            # In base64 the counter is encoded together with the values.
            raw, _ = self._take(data, 0, width + size, encoded)
            if int(np.frombuffer(raw, self.counter, 1)[0]) != size:
                raise FileFormatError(f"{self.name}: an array does not have the size of the grid.")
            return raw[width : width + size]
        (blocks,), _ = self._numbers(data, 0, 1, encoded)
        if not 1 <= blocks <= len(data):
            raise FileFormatError(f"{self.name}: an array states {blocks} blocks.")
        head, at = self._numbers(data, 0, 3 + blocks, encoded)
        block, last, lengths = head[1], head[2], head[3:]
        if block * (blocks - (1 if last else 0)) + last != size:
            raise FileFormatError(f"{self.name}: an array does not have the size of the grid.")
        body, _ = self._take(data, at, sum(lengths), encoded)
        out, start = bytearray(), 0
        for n, length in enumerate(lengths):
            want = last if last and n == blocks - 1 else block
            try:
                engine = zlib.decompressobj()
                piece = engine.decompress(body[start : start + length], want + 1)
            except zlib.error as error:
                raise FileFormatError(f"{self.name} is damaged: {error}.") from error
            if len(piece) != want:
                raise FileFormatError(f"{self.name}: a block does not unpack to its stated size.")
            out += piece
            start += length
        return bytes(out)


def _open(path: Path) -> _File:
    name = path.name
    try:
        size = path.stat().st_size
        if size > MAX_BYTES:
            raise FileFormatError(f"{name} has {size} bytes; at most {MAX_BYTES} are read.")
        data = path.read_bytes()
    except OSError as error:
        raise ResourceError(f"{name} cannot be read: {error.strerror or error}.") from error
    if not data.rstrip().endswith(b"</VTKFile>"):
        raise FileFormatError(f"{name} is cut short, or is no VTI file.")
    head, appended, encoded = data, b"", False
    found = re.search(rb"<AppendedData([^>]*)>\s*_", data)
    if found:
        head = data[: found.start()] + b"</VTKFile>"
        encoded = b"base64" in found[1]
        end = data.rfind(b"</AppendedData>")
        appended = data[found.end() : end if end > 0 else None]
        if encoded:
            appended = appended.strip()
    root = parse_xml(head, name)
    if root.tag != "VTKFile" or root.get("type") != "ImageData":
        raise FileFormatError(f"{name} is no VTI file: it holds {root.tag} {root.get('type', '')}.")
    packer = root.get("compressor")
    if packer not in (None, "", "vtkZLibDataCompressor"):
        raise InputError(f"The file is packed with {packer}; zlib is read.", file=name)
    order = ">" if root.get("byte_order") == "BigEndian" else "<"
    counter = {"UInt64": "u8", "UInt32": "u4"}.get(root.get("header_type", "UInt32"))
    if counter is None:
        raise FileFormatError(f"{name}: counters of type {root.get('header_type')} are not read.")
    return _File(name, root, appended, encoded, order, np.dtype(order + counter), bool(packer))


def _floats(node: Any, key: str, count: int, default: str, name: str) -> NDArray[np.float64]:
    try:
        values = np.array([float(v) for v in node.get(key, default).split()])
    except ValueError as error:
        raise FileFormatError(f"{name}: '{key}' is damaged ({error}).") from error
    if values.shape != (count,):
        raise FileFormatError(f"{name}: '{key}' needs {count} numbers; got {node.get(key)!r}.")
    return values


def _choose(image: Any, wanted: str | None, name: str) -> tuple[str, Any, dict[str, Any]]:
    """Kind (cells or points), the array that is read, and all single-valued arrays of the kind."""
    found: dict[str, dict[str, Any]] = {}
    for kind in ("CellData", "PointData"):
        nodes = image.findall(f"Piece/{kind}/DataArray")
        found[kind] = {
            n.get("Name", ""): n for n in nodes if n.get("NumberOfComponents", "1") in ("", "1")
        }
    for kind, nodes in found.items():
        for key in (wanted,) if wanted is not None else _LABEL_NAMES:
            if key in nodes:
                return kind, nodes[key], nodes
    names = [key for nodes in found.values() for key in nodes]
    if wanted is None and len(names) == 1:
        kind = next(k for k, nodes in found.items() if nodes)
        return kind, found[kind][names[0]], found[kind]
    held = ", ".join(names) or "none with one value a voxel"
    raise InputError(
        f"Say which array is to be read; the file holds {held}.",
        file=name,
        key="field",
    )


def _table(opened: _File) -> LabelTable:
    for node in opened.root.findall("ImageData/FieldData/Array"):
        if node.get("Name") == KEY and node.get("format") == "ascii":
            try:
                codes = bytes(int(w) for w in (node.text or "").split())
                text = codes.rstrip(b"\0").decode()
            except ValueError as error:
                raise FileFormatError(f"{opened.name}: its label table is damaged.") from error
            return parse_table(text, opened.name)
    return LabelTable()


def _extras(
    opened: _File, nodes: Mapping[str, Any], shape: tuple[int, ...], step: float
) -> dict[str, Any]:
    """Occupancy and distance as this program writes them."""
    found: dict[str, Any] = {}
    count = int(np.prod(shape))
    if "occupancy_of_255" in nodes:
        found["occupancy"] = opened.array(nodes["occupancy_of_255"], count).astype(np.uint8)
    if "distance_mm" in nodes:
        steps = np.rint(opened.array(nodes["distance_mm"], count) * (DISTANCE_STEPS / step))
        found["distance"] = np.clip(np.nan_to_num(steps), -127, 127).astype(np.int8)
    return {key: v.reshape(shape, order="F") for key, v in found.items()}


def read_vti(path: Path, unit: str | None = None, *, field: str | None = None) -> Volume:
    """Read one array of a VTI file as a volume.

    Parameters
    ----------
    unit : str, optional
        Must be given for files of other programs: VTI does not say its unit of length.
    field : str, optional
        Name of the array; "label" or the only one where left out.

    Raises
    ------
    InputError
        Missing unit, an array that is not there, oblique directions, several pieces.
    FileFormatError
        Damaged or cut files, heads that state more than is there or than is read.
    """
    opened = _open(path)
    name = opened.name
    images = opened.root.findall("ImageData")
    if len(images) != 1 or len(images[0].findall("Piece")) != 1:
        raise InputError("The file must hold one image of one piece.", file=name)
    image = images[0]
    kind, node, nodes = _choose(image, field, name)
    extent = _floats(image.find("Piece"), "Extent", 6, "", name)
    if (np.abs(extent) > 2**31).any():
        raise FileFormatError(f"{name} states the extent {extent.tolist()}.")
    low, high = extent[::2].astype(int), extent[1::2].astype(int)
    counts = [int(n) for n in high - low + (1 if kind == "PointData" else 0)]
    check_size(name, counts, 8)
    values = opened.array(node, int(np.prod(counts, dtype=object))).reshape(counts, order="F")
    table = read_beside(path) or _table(opened)
    factor = millimetres("mm" if table.grid else None, unit, name)
    step = _floats(image, "Spacing", 3, "1 1 1", name)
    turn = _floats(image, "Direction", 9, "1 0 0 0 1 0 0 0 1", name).reshape(3, 3)
    directions = factor * turn * step
    first = low + (0.0 if kind == "PointData" else 0.5)
    centre = factor * _floats(image, "Origin", 3, "0 0 0", name) + directions @ first
    turned = straighten(values, directions, centre, name)
    extras: dict[str, Any] = {}
    if table.grid is not None and kind == "CellData" and field in (None, *_LABEL_NAMES):
        extras = _extras(opened, nodes, turned.values.shape, min(turned.spacing))
    return labelled(path, turned, table, **extras)

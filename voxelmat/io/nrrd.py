"""NRRD: one text head and one packed array, out and in, in double precision.

Follows the public definition of the format ("Definition of NRRD File Format", version 5): fields
``space directions`` and ``space origin`` (centre of the first sample), ``space units``, and
key/value pairs, in which the label table is kept.
"""

from __future__ import annotations

import json
import re
import zlib
from pathlib import Path
from typing import BinaryIO

import numpy as np

from voxelmat.errors import FileFormatError, InputError, ResourceError
from voxelmat.io.atomic import aside
from voxelmat.io.axes import millimetres, straighten
from voxelmat.io.label_table import KEY, LabelTable, labelled, parse_table, read_beside, table_of
from voxelmat.io.volume_limits import bounded_inflate, check_size, check_whole
from voxelmat.model.volume import Volume

__all__ = ["read_nrrd", "write_nrrd"]

_MOST_LINES = 100_000
_LONGEST_LINE = 1 << 26
_TYPES = {
    "i1": "signed char, int8, int8_t",
    "u1": "uchar, unsigned char, uint8, uint8_t",
    "i2": "short, short int, signed short, signed short int, int16, int16_t",
    "u2": "ushort, unsigned short, unsigned short int, uint16, uint16_t",
    "i4": "int, signed int, int32, int32_t",
    "u4": "uint, unsigned int, uint32, uint32_t",
    "i8": "longlong, long long, long long int, signed long long, int64, int64_t",
    "u8": "ulonglong, unsigned long long, unsigned long long int, uint64, uint64_t",
    "f4": "float",
    "f8": "double",
}
_KIND = {word: key for key, words in _TYPES.items() for word in words.split(", ")}
# Named spaces, as factors that turn each axis to right, anterior, superior.
_SPACES = {
    "right-anterior-superior": (1, 1, 1), "ras": (1, 1, 1),
    "left-anterior-superior": (-1, 1, 1), "las": (-1, 1, 1),
    "left-posterior-superior": (-1, -1, 1), "lps": (-1, -1, 1),
    "3d-right-handed": (1, 1, 1),
}  # fmt: skip


def _vector(values: tuple[float, ...]) -> str:
    return "(" + ",".join(repr(float(v)) for v in values) + ")"


def write_nrrd(volume: Volume, path: Path) -> None:
    """Write labels (or grey values); spacing and origin lose no digit.

    Raises
    ------
    ResourceError
        If it cannot be written; nothing is left half there.
    """
    grid = volume.grid
    h = grid.spacing
    directions = " ".join(
        _vector(tuple(h[a] if a == b else 0.0 for b in range(3))) for a in (0, 1, 2)
    )
    centre = tuple(o + s / 2 for o, s in zip(grid.origin, h, strict=True))
    values = volume.values
    if volume.is_labels and (not values.size or int(values.max()) < 256):
        values = values.astype(np.uint8)
    name = {"u1": "uint8", "u2": "uint16", "f4": "float"}[values.dtype.str[1:]]
    table = json.dumps(table_of(volume)).replace("\\", "\\\\").replace("\n", "\\n")
    head = [
        "NRRD0005",
        "# labels of a voxel part; lengths in mm",
        f"type: {name}",
        "dimension: 3",
        "space dimension: 3",
        "sizes: " + " ".join(map(str, grid.shape)),
        f"space directions: {directions}",
        "kinds: domain domain domain",
        'space units: "mm" "mm" "mm"',
        f"space origin: {_vector(centre)}",
        "endian: little",
        "encoding: gzip",
        f"{KEY}:={table}",
    ]
    packer = zlib.compressobj(3, zlib.DEFLATED, 31)
    with aside(path) as temporary, temporary.open("wb") as handle:
        handle.write(("\n".join(head) + "\n\n").encode())
        for k in range(grid.shape[2]):
            plane = np.ascontiguousarray(values[:, :, k].T)
            handle.write(packer.compress(plane.astype(plane.dtype.newbyteorder("<")).tobytes()))
        handle.write(packer.flush())


def _head(handle: BinaryIO, file: str) -> tuple[dict[str, str], dict[str, str]]:
    """Fields (lower case) and key/value pairs; leaves the handle at the first byte of values."""
    if not re.fullmatch(rb"NRRD000[1-6]\r?\n", handle.readline(16)):
        raise FileFormatError(f"{file} is not an NRRD file: it does not begin with NRRD000n.")
    fields: dict[str, str] = {}
    pairs: dict[str, str] = {}
    for _ in range(_MOST_LINES):
        raw = handle.readline(_LONGEST_LINE)
        if not raw.endswith(b"\n"):
            raise FileFormatError(f"{file} is cut short inside its head, or a line is too long.")
        try:
            line = raw.decode("utf-8").rstrip("\r\n")
        except UnicodeDecodeError as error:
            raise FileFormatError(f"{file}: the head is not text ({error}).") from error
        if not line:
            return fields, pairs
        if line.startswith("#"):
            continue
        found = re.match(r"([^:]+?):(=|\s*)(.*)$", line)
        if found is None:
            raise FileFormatError(f"{file}: the head holds a line that is no field: '{line[:60]}'.")
        into = pairs if found[2] == "=" else fields
        key = found[1] if found[2] == "=" else found[1].strip().lower()
        into[key] = found[3]
    raise FileFormatError(f"{file}: the head has more than {_MOST_LINES} lines.")


def _unescaped(text: str) -> str:
    return re.sub(r"\\(.)", lambda m: "\n" if m[1] == "n" else m[1], text)


class _Head:
    """The fields of a head, checked."""

    def __init__(self, fields: dict[str, str], file: str) -> None:
        self.fields, self.file = fields, file
        dimension = self._numbers("dimension", int)[0]
        if dimension != 3:
            raise InputError(
                f"The file has {dimension} axes; a volume of three is read. Save one channel or "
                "one time step.",
                file=file,
            )
        kinds = fields.get("kinds", "domain domain domain").lower().split()
        odd = [k for k in kinds if k not in ("domain", "space", "none", "???")]
        if odd:
            raise InputError(
                f"An axis is marked as '{odd[0]}'; all three must run along space.", file=file
            )
        self.shape = self._numbers("sizes", int)
        if len(self.shape) != 3:
            raise FileFormatError(f"{file}: three sizes are needed; got {self.shape}.")
        word = self._need("type").strip().lower()
        if word not in _KIND:
            raise InputError(f"Values of type '{word}' are not read.", file=file, key="type")
        self.dtype = np.dtype(_KIND[word])
        if self.dtype.itemsize > 1:
            endian = self._need("endian").strip().lower()
            self.dtype = self.dtype.newbyteorder(">" if endian == "big" else "<")
        self.encoding = self._need("encoding").strip().lower()
        if self.encoding not in ("raw", "gzip", "gz"):
            raise InputError(
                f"The encoding '{self.encoding}' is not read; save it as raw or gzip.",
                file=file,
                key="encoding",
            )
        for key in ("data file", "datafile", "line skip", "lineskip", "byte skip", "byteskip"):
            if fields.get(key, "0").strip() != "0":
                raise InputError(
                    f"The file uses '{key}', which is not read: save head and values as one file.",
                    file=file,
                    key=key,
                )

    def _need(self, key: str) -> str:
        if key not in self.fields:
            raise FileFormatError(f"{self.file}: the head has no field '{key}'.")
        return self.fields[key]

    def _numbers(self, key: str, kind: type) -> list[int]:
        try:
            return [kind(v) for v in self._need(key).split()]
        except ValueError as error:
            raise FileFormatError(f"{self.file}: field '{key}' is damaged ({error}).") from error

    def unit(self) -> str | None:
        """The one unit of length, or None."""
        found = set(re.findall(r'"([^"]*)"', self.fields.get("space units", "")))
        found |= set(re.findall(r'"([^"]*)"', self.fields.get("units", "")))
        if len(found) > 1:
            raise InputError(f"The axes have different units: {sorted(found)}.", file=self.file)
        return found.pop() if found else None

    def _vectors(self, key: str, count: int) -> np.ndarray:
        rows = re.findall(r"\(([^()]*)\)|none", self.fields.get(key, ""))
        try:
            table = np.array([[float(v) for v in row.split(",")] for row in rows])
        except ValueError as error:
            raise FileFormatError(f"{self.file}: field '{key}' is damaged ({error}).") from error
        if table.shape != (count, 3):
            raise FileFormatError(f"{self.file}: field '{key}' needs {count} vectors of three.")
        return table

    def placing(self, factor: float) -> tuple[np.ndarray, np.ndarray]:
        """Directions (columns) and centre of the first voxel, mm."""
        turn = np.ones(3)
        space = self.fields.get("space", "").strip().lower()
        if space:
            if space not in _SPACES:
                raise InputError(f"The space '{space}' is not read.", file=self.file, key="space")
            turn = np.array(_SPACES[space], dtype=np.float64)
        if "space directions" in self.fields:
            directions = self._vectors("space directions", 3).T
            centre = (
                self._vectors("space origin", 1)[0]
                if "space origin" in self.fields
                else directions.sum(axis=1) / 2
            )
            return factor * turn[:, None] * directions, factor * turn * centre
        if "spacings" in self.fields:
            try:
                step = np.array([float(v) for v in self.fields["spacings"].split()])
            except ValueError as error:
                raise FileFormatError(f"{self.file}: 'spacings' is damaged ({error}).") from error
            if step.shape == (3,):
                return factor * np.diag(step), factor * step / 2
        raise InputError(
            "The head gives no size of the voxels (space directions or spacings).", file=self.file
        )


def read_nrrd(path: Path, unit: str | None = None) -> Volume:
    """Read an NRRD volume with its head attached, raw or gzip.

    Raises
    ------
    InputError
        Missing unit or voxel size, oblique axes, more than three axes, another type or encoding.
    FileFormatError
        Damaged or cut files, heads that state more than is there or than is read.
    """
    file = path.name
    try:
        with path.open("rb") as handle:
            fields, pairs = _head(handle, file)
            head = _Head(fields, file)
            size = check_size(file, head.shape, head.dtype.itemsize)
            factor = millimetres(head.unit(), unit, file)
            directions, centre = head.placing(factor)
            packed = head.encoding != "raw"
            check_whole(path, size, packed=packed, start=handle.tell())
            raw = bounded_inflate(handle, size, file) if packed else handle.read(size)
    except OSError as error:
        raise ResourceError(f"{file} cannot be read: {error.strerror or error}.") from error
    values = np.frombuffer(raw, dtype=head.dtype).reshape(head.shape, order="F")
    turned = straighten(values, directions, centre, file)
    table = read_beside(path)
    if table is None:
        table = parse_table(_unescaped(pairs[KEY]), file) if KEY in pairs else LabelTable()
    return labelled(path, turned, table)

"""Reads the volumetric image stack of a 3MF package as labels, fractions or grey values.

A property is read as it is; where there is none, the composite's fractions over base materials
become labels with blends, one for every mixture that occurs.
"""

from __future__ import annotations

import io
import math
import struct
import warnings
import zipfile
import zlib
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from PIL import Image

from voxelmat.errors import FileFormatError, InputError
from voxelmat.io.axes import straighten
from voxelmat.io.label_table import LabelTable, labelled, parse_table, read_beside
from voxelmat.io.package3mf import check_package
from voxelmat.io.volume3mf import CORE, TABLE, VOLUMETRIC
from voxelmat.io.volume_limits import check_size, parse_xml
from voxelmat.model.blend import Blend
from voxelmat.model.volume import Volume
from voxelmat.units import length_factor

__all__ = ["read_3mf_volume"]

_C, _V = f"{{{CORE}}}", f"{{{VOLUMETRIC}}}"
_CHANNELS = {"red": 0, "green": 1, "blue": 2, "alpha": 3}
_SHEET_BYTES = 1 << 28
_DAMAGED = (
    OSError, SyntaxError, ValueError, EOFError, NotImplementedError, struct.error, zlib.error,
    zipfile.BadZipFile, Image.DecompressionBombError,
)  # fmt: skip
_MODES = {"L": 255, "RGB": 255, "RGBA": 255, "LA": 255, "P": 0, "1": 1, "I;16": 65535, "I": 65535}


@dataclass(frozen=True, slots=True)
class _Package:
    """The model of an open package, and its resources by number."""

    name: str
    archive: zipfile.ZipFile
    root: Any
    byid: dict[str, Any]

    def resource(self, key: str | None, tag: str) -> Any:
        node = self.byid.get(key or "")
        if node is None or node.tag != _V + tag:
            raise FileFormatError(f"{self.name}: resource {key} is no {tag}.")
        return node

    def sheet(self, path: str, columns: int, rows: int) -> tuple[NDArray[Any], int]:
        """Pixels as rows, columns (and channels), and their largest value."""
        try:
            info = self.archive.getinfo(path.lstrip("/"))
            if info.file_size > _SHEET_BYTES:
                raise FileFormatError(f"{self.name}: the sheet '{path}' is too large.")
            with warnings.catch_warnings():
                # The size is compared with the model's own before anything is unpacked.
                warnings.simplefilter("ignore", Image.DecompressionBombWarning)
                with Image.open(io.BytesIO(self.archive.read(info)), formats=["PNG"]) as image:
                    if image.size != (columns, rows):
                        raise FileFormatError(
                            f"{self.name}: the sheet '{path}' is {image.size[0]} x "
                            f"{image.size[1]}; the model states {columns} x {rows}."
                        )
                    most = _MODES.get(image.mode, 0)
                    if not most:
                        raise InputError(
                            f"The sheet '{path}' is a PNG of kind {image.mode}; grey and colour of "
                            "8 bits and grey of 16 bits are read.",
                            file=self.name,
                        )
                    return np.asarray(image), most
        except KeyError as error:
            raise FileFormatError(f"{self.name}: the sheet '{path}' is missing.") from error
        except _DAMAGED as error:
            if isinstance(error, FileFormatError | InputError):
                raise
            raise FileFormatError(
                f"{self.name}: the sheet '{path}' is damaged: {error}."
            ) from error


@dataclass(frozen=True, slots=True)
class _Field:
    """One mapped channel: values in the file's order (column, row from above, sheet)."""

    values: NDArray[np.float64]
    transform: NDArray[np.float64]  # object to uvw, 4 x 4, columns of points
    nearest: bool


def _matrix(text: str | None, name: str) -> NDArray[np.float64]:
    """4 x 4 for column vectors from the twelve numbers of a 3MF transform."""
    if text is None:
        return np.eye(4)
    try:
        twelve = np.array([float(v) for v in text.split()]).reshape(4, 3)
    except ValueError as error:
        raise FileFormatError(f"{name}: the transform '{text[:60]}' is damaged.") from error
    if not np.isfinite(twelve).all():
        raise FileFormatError(f"{name}: a transform holds numbers that are not finite.")
    whole = np.eye(4)
    whole[:3] = twelve.T
    return whole


def _real(node: Any, key: str, default: float, name: str) -> float:
    try:
        value = float(node.get(key, default))
    except ValueError as error:
        raise FileFormatError(f"{name}: '{key}' is no number: {node.get(key)!r}.") from error
    if not math.isfinite(value):
        raise FileFormatError(f"{name}: '{key}' is not finite.")
    return value


def _field(package: _Package, node: Any) -> _Field:
    """Values of a property, colour or material mapping."""
    name = package.name
    function = package.resource(node.get("functionid"), "functionfromimage3d")
    image = package.resource(function.get("image3did"), "image3d")
    stack = image.find(_V + "imagestack")
    if stack is None:
        raise InputError(
            "The 3D image is no stack of PNG sheets; no other kind is read.", file=name
        )
    try:
        columns, rows, sheets = (
            int(stack.get(k, "")) for k in ("columncount", "rowcount", "sheetcount")
        )
    except ValueError as error:
        raise FileFormatError(f"{name}: the size of an image stack is damaged.") from error
    check_size(name, (columns, rows, sheets), 8)
    paths = [s.get("path", "") for s in stack.findall(_V + "imagesheet")]
    if len(paths) != sheets:
        raise FileFormatError(f"{name}: {sheets} sheets are stated, {len(paths)} are named.")
    channel = node.get("channel", "")
    if channel not in _CHANNELS:
        raise InputError(f"Channel '{channel}' is not read; red, green, blue or alpha.", file=name)
    scale = _real(function, "valuescale", 1.0, name)
    offset = _real(function, "valueoffset", 0.0, name)
    values = np.empty((columns, rows, sheets), order="F")
    for k, path in enumerate(paths):
        pixels, most = package.sheet(path, columns, rows)
        if pixels.ndim == 3:
            at = min(_CHANNELS[channel], pixels.shape[2] - 1)
            pixels = pixels[..., at]
        values[:, :, k] = pixels.T * (scale / most) + offset
    nearest = function.get("filter", "linear") == "nearest"
    return _Field(values, _matrix(node.get("transform"), name), nearest)


def _open(path: Path, archive: zipfile.ZipFile) -> _Package:
    member = next(m for m in archive.infolist() if m.filename.lower().endswith("3d/3dmodel.model"))
    root = parse_xml(archive.read(member), path.name)
    resources = root.find(_C + "resources")
    found = {} if resources is None else {n.get("id", ""): n for n in resources}
    return _Package(path.name, archive, root, found)


def _data(package: _Package) -> tuple[Any, NDArray[np.float64], tuple[str, ...]]:
    """The volume data of the first placed mesh that has some, and where it is placed."""
    items = package.root.findall(f"{_C}build/{_C}item")
    for item in items:
        thing = package.byid.get(item.get("objectid", ""))
        mesh = None if thing is None else thing.find(_C + "mesh")
        if mesh is not None and mesh.get(_V + "volumeid"):
            data = package.resource(mesh.get(_V + "volumeid"), "volumedata")
            note = "" if len(items) == 1 else "Only the first placed object with a volume is read."
            place = _matrix(item.get("transform"), package.name)
            return data, place, (note,) if note else ()
    raise InputError(
        "No placed mesh of the package has volume data; read it as a mesh instead.",
        file=package.name,
    )


def _mixtures(package: _Package, node: Any) -> tuple[_Field, dict[int, Blend]]:
    """Labels for every mixture of a composite."""
    name = package.name
    group = package.byid.get(node.get("basematerialid", ""))
    bases = [] if group is None else [b.get("name", "") for b in group.findall(_C + "base")]
    fields = [_field(package, m) for m in node.findall(_V + "materialmapping")]
    if not fields or len(bases) < len(fields) or len(set(bases)) != len(bases):
        raise FileFormatError(f"{name}: its composite does not fit its base materials.")
    first = fields[0]
    if any(f.values.shape != first.values.shape or (f.transform != first.transform).any()
           for f in fields):  # fmt: skip
        raise InputError(
            "The resins' fractions lie on different grids; no mixture is read.", file=name
        )
    shares = np.stack([f.values.ravel(order="F") for f in fields], axis=1)
    if (shares < -1e-6).any():
        raise FileFormatError(f"{name}: a fraction lies below 0.")
    rows, index = np.unique(np.rint(shares * 65535).astype(np.int64), axis=0, return_inverse=True)
    if len(rows) > 65535:
        raise InputError("The composite holds more than 65535 mixtures; thin it out.", file=name)
    label = np.zeros(len(rows))
    blends: dict[int, Blend] = {}
    for n, row in enumerate(rows):
        if row.sum() > 0:
            label[n] = len(blends) + 1
            blends[len(blends) + 1] = Blend.of(dict(zip(bases, row.tolist(), strict=False)))
    values = label[index.reshape(-1)].reshape(first.values.shape, order="F")
    return _Field(values, first.transform, all(f.nearest for f in fields)), blends


def _property(package: _Package, data: Any, field: str | None) -> Any | None:
    nodes = {n.get("name", ""): n for n in data.findall(_V + "property")}
    if field is not None:
        found = nodes.get(field, nodes.get(f"vm:{field}"))
        if found is None:
            raise InputError(
                f"There is no property '{field}'; there are: {', '.join(nodes) or 'none'}.",
                file=package.name,
                key="field",
            )
        return found
    for key, node in nodes.items():
        if key.rsplit(":", 1)[-1] == "label":
            return node
    return None


def _table(package: _Package) -> LabelTable:
    for node in package.root.findall(_C + "metadata"):
        if node.get("name") == TABLE:
            return parse_table(node.text or "", package.name)
    return LabelTable()


def read_3mf_volume(path: Path, *, field: str | None = None) -> Volume:
    """Read the volume of the first placed mesh that has one.

    Parameters
    ----------
    field : str, optional
        Name of a property. Left out: "label"; without it, the composite.

    Raises
    ------
    InputError
        No volume data, labels that are not sampled nearest, oblique transforms, kinds of PNG or
        functions that are not read.
    FileFormatError
        Damaged, cut or unsafe packages; stacks larger than is read.
    """
    unit = check_package(path).unit
    with zipfile.ZipFile(path) as archive:
        package = _open(path, archive)
        data, place, notes = _data(package)
        node = _property(package, data, field)
        blends: dict[int, Blend] = {}
        if node is not None:
            read = _field(package, node)
        elif data.find(_V + "composite") is not None:
            read, blends = _mixtures(package, data.find(_V + "composite"))
        else:
            raise InputError(
                "The volume data hold neither a label nor a composite; say which property is to be "
                "read.",
                file=path.name,
                key="field",
            )
        beside = read_beside(path)
        table = _table(package) if beside is None else beside
    return _volume(path, read, place, length_factor(unit), table, blends, notes)


def _volume(
    path: Path,
    read: _Field,
    place: NDArray[np.float64],
    factor: float,
    table: LabelTable,
    blends: dict[int, Blend],
    notes: tuple[str, ...],
) -> Volume:
    whole = np.rint(read.values)
    if read.nearest and np.abs(whole - read.values).max() < 1e-3:
        if whole.min() < 0 or whole.max() > 65535:
            raise InputError("Labels lie outside 0 to 65535.", file=path.name)
        values: NDArray[Any] = whole.astype(np.uint16)
    elif table.grid is not None or blends:
        raise InputError("Labels must be sampled nearest; this file mixes them.", file=path.name)
    else:
        values = read.values.astype(np.float32)
    columns, rows, sheets = values.shape
    try:
        back = place @ np.linalg.inv(read.transform)
    except np.linalg.LinAlgError as error:
        raise FileFormatError(f"{path.name}: a transform flattens space.") from error
    steps = np.diag([1 / columns, -1 / rows, 1 / sheets])
    directions = factor * back[:3, :3] @ steps
    start = np.array([0.5 / columns, 1 - 0.5 / rows, 0.5 / sheets])
    centre = factor * (back[:3, :3] @ start + back[:3, 3])
    volume = labelled(path, straighten(values, directions, centre, path.name), table)
    names = volume.names or {n: str(b) for n, b in blends.items()}
    return Volume(
        grid=volume.grid,
        values=volume.values,
        names=names,
        blends=volume.blends or blends,
        resins=volume.resins,
        name=volume.name,
        source=path.name,
        notes=(*volume.notes, *notes),
    )

"""Writes parts, volumes and results as VTI: the open XML image data that viewers read.

One file holds a regular grid with arrays on its voxels (cell data) and on its corners (point
data), each packed with zlib in blocks and appended as raw bytes after the XML head.
"""

from __future__ import annotations

import json
import zlib
from collections.abc import Mapping
from pathlib import Path
from typing import Any, NamedTuple
from xml.sax.saxutils import quoteattr

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.io.atomic import aside
from voxelmat.io.label_table import KEY, table_of
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import DISTANCE_STEPS, Part
from voxelmat.model.result import StaticResult
from voxelmat.model.volume import Volume

__all__ = ["write_vti"]

Array = NDArray[Any]

_BLOCK = 1 << 20  # bytes of an array packed at a time
_LEVEL = 3  # of zlib: most of the size at a fraction of the time
_TYPES = {
    "u1": "UInt8", "u2": "UInt16", "u4": "UInt32", "i1": "Int8", "i2": "Int16", "i4": "Int32",
    "i8": "Int64", "f4": "Float32", "f8": "Float64",
}  # fmt: skip
# The format orders symmetric tensors xx, yy, zz, xy, yz, xz.
_TENSOR = (0, 1, 2, 3, 5, 4)
_TENSOR_NAMES = ("XX", "YY", "ZZ", "XY", "YZ", "XZ")


class _Field(NamedTuple):
    name: str
    kind: str
    names: tuple[str, ...]  # of the components
    packed: list[bytes]

    @property
    def size(self) -> int:
        return sum(map(len, self.packed))


def _pack(values: Array) -> list[bytes]:
    """Blocks after the format's head of sizes: count, block size, last block's, packed sizes."""
    raw = values.reshape(-1).view(np.uint8)
    packed = [
        zlib.compress(raw[n : n + _BLOCK].tobytes(), _LEVEL) for n in range(0, len(raw), _BLOCK)
    ]
    # A last block of full size is said as 0.
    head = [len(packed), _BLOCK, len(raw) % _BLOCK, *map(len, packed)]
    return [np.asarray(head, dtype="<u8").tobytes(), *packed]


def _field(name: str, values: Array) -> _Field:
    """Bring an array ``[i, j, k]`` or ``[i, j, k, c]`` into the order of the file, and pack it."""
    names: tuple[str, ...] = ()
    if values.dtype == bool:
        values = values.astype(np.uint8)
    kind = _TYPES.get(values.dtype.str[1:])
    if kind is None:
        raise InputError(f"Field '{name}' holds {values.dtype} values; give numbers.", key=name)
    if values.ndim == 4:
        if values.shape[3] == 6:
            values, names = values[..., list(_TENSOR)], _TENSOR_NAMES
        else:
            names = ("X", "Y", "Z") if values.shape[3] == 3 else ("",) * values.shape[3]
        values = values.transpose(2, 1, 0, 3)
    else:
        values = values.T
    little = values.dtype.newbyteorder("<")
    return _Field(name, kind, names, _pack(np.ascontiguousarray(values, dtype=little)))


def _volume_fields(volume: Volume) -> dict[str, Array]:
    if not volume.is_labels:
        return {"value": volume.values}
    labels = volume.values
    fields: dict[str, Array] = {"label": labels}
    if volume.occupancy is not None:
        fields["occupancy_of_255"] = volume.occupancy
    size = 1 + max(volume.blends, default=0)
    for resin in volume.resins:
        share = np.zeros(max(size, int(labels.max(initial=0)) + 1), dtype=np.float32)
        for label, blend in volume.blends.items():
            share[label] = blend.fraction(resin.name)
        if share.any():
            fields[f"fraction_{resin.name}"] = share[labels]
    if volume.distance is not None:
        step = min(volume.grid.spacing) / DISTANCE_STEPS
        fields["distance_mm"] = volume.distance.astype(np.float32) * np.float32(step)
    return fields


def _field_data(volume: Volume) -> list[str]:
    """The label table as a text array of the whole data set: codes of characters, then 0."""
    codes = " ".join(map(str, json.dumps(table_of(volume)).encode()))
    return [
        "    <FieldData>",
        f'      <Array type="String" Name="{KEY}" NumberOfTuples="1" format="ascii">',
        f"        {codes} 0",
        "      </Array>",
        "    </FieldData>",
    ]


def _result_fields(result: StaticResult) -> dict[str, Array]:
    return {
        "displacement_mm": result.displacement,
        "stress_MPa": result.stress,
        "strain": result.strain,
        "von_mises_MPa": result.von_mises.astype(np.float32),
        "energy_density_mJ_mm3": result.energy_density,
    }


def _sorted_out(grid: VoxelGrid, fields: Mapping[str, Array]) -> tuple[list[_Field], list[_Field]]:
    """Packed fields on points and on cells, told apart by their shape."""
    points: list[_Field] = []
    cells: list[_Field] = []
    for name, given in fields.items():
        values = np.asarray(given)
        shape = values.shape[:3]
        if values.ndim not in (3, 4) or shape not in (grid.shape, grid.node_shape):
            raise InputError(
                f"Field '{name}' has shape {values.shape}; it needs {grid.shape} (voxels) or "
                f"{grid.node_shape} (corners), with components last.",
                key=name,
            )
        (cells if shape == grid.shape else points).append(_field(name, values))
    return points, cells


def _section(tag: str, fields: list[_Field], offset: int) -> tuple[list[str], int]:
    lines = [f"      <{tag}>"]
    for field in fields:
        parts = f' NumberOfComponents="{len(field.names)}"' if field.names else ""
        for n, component in enumerate(field.names):
            parts += f' ComponentName{n}="{component}"' if component else ""
        lines.append(
            f'        <DataArray type="{field.kind}" Name={quoteattr(field.name)}{parts} '
            f'format="appended" offset="{offset}"/>'
        )
        offset += field.size
    return [*lines, f"      </{tag}>"], offset


def _head(volume: Volume, points: list[_Field], cells: list[_Field]) -> str:
    grid = volume.grid
    extent = " ".join(f"0 {n}" for n in grid.shape)
    origin, spacing = (" ".join(map(repr, v)) for v in (grid.origin, grid.spacing))
    on_points, offset = _section("PointData", points, 0)
    on_cells, _ = _section("CellData", cells, offset)
    return "\n".join(
        [
            '<?xml version="1.0"?>',
            '<VTKFile type="ImageData" version="1.0" byte_order="LittleEndian" '
            'header_type="UInt64" compressor="vtkZLibDataCompressor">',
            f'  <ImageData WholeExtent="{extent}" Origin="{origin}" Spacing="{spacing}">',
            *_field_data(volume),
            f'    <Piece Extent="{extent}">',
            *on_points,
            *on_cells,
            "    </Piece>",
            "  </ImageData>",
            '  <AppendedData encoding="raw">',
            "   _",
        ]
    )


def write_vti(
    source: Part | Volume | StaticResult,
    path: str | Path,
    *,
    extra: Mapping[str, Array] | None = None,
) -> Path:
    """Write a part, a volume or a result; the file is whole or not there.

    Parameters
    ----------
    source : Part, Volume or StaticResult
        A part gives labels, occupancy, resin fractions and signed distance; a result also the
        displacement on the corners and stress, strain, von Mises stress and energy density on the
        voxels. Names carry the unit; lengths of the grid are mm.
    path : path
        Ends in ``.vti``.
    extra : mapping of str to ndarray, optional
        More fields, ``[i, j, k]`` or with components last, on voxels or on corners (told apart by
        the shape); six components are taken as xx, yy, zz, xy, xz, yz.

    Returns
    -------
    Path

    Raises
    ------
    InputError
        A name that does not end in .vti, a field of another shape or type.
    ResourceError
        If it cannot be written.
    """
    path = Path(path)
    if path.suffix.lower() != ".vti":
        raise InputError("The name of a VTI file ends in .vti.", file=str(path))
    if isinstance(source, Volume):
        volume = source
    else:
        volume = Volume.from_part(source if isinstance(source, Part) else source.part)
    fields = _volume_fields(volume)
    if isinstance(source, StaticResult):
        fields |= _result_fields(source)
    points, cells = _sorted_out(volume.grid, fields | dict(extra or {}))
    with aside(path) as temporary, temporary.open("wb") as handle:
        handle.write(_head(volume, points, cells).encode())
        for field in (*points, *cells):
            handle.writelines(field.packed)
        handle.write(b"\n  </AppendedData>\n</VTKFile>\n")
    return path

"""What the labels of a volume stand for, as JSON: inside a format where it has a place, and beside.

The table also keeps the grid in full double precision, for formats that hold less.
"""

from __future__ import annotations

import hashlib
import json
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import FileFormatError, InputError
from voxelmat.io.atomic import write_json
from voxelmat.io.axes import Straight
from voxelmat.io.store import material_of
from voxelmat.model.blend import Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.material import Material
from voxelmat.model.volume import Volume

__all__ = [
    "KEY", "LabelTable", "labelled", "parse_table", "read_beside", "sidecar", "table_of",
    "write_beside",
]  # fmt: skip

#: Name of the table inside a format's own metadata.
KEY = "voxelmat_label_table"
_FORMAT = 1
_LARGEST = 1 << 26  # bytes of a table that is read
_AGREE = 1e-5  # relative to the spacing; formats with single precision hold better than this


@dataclass(frozen=True, slots=True, kw_only=True)
class LabelTable:
    """Names, blends and resins of labels; the exact grid that the file was written from."""

    names: dict[int, str] = field(default_factory=dict)
    blends: dict[int, Blend] = field(default_factory=dict)
    resins: tuple[Material, ...] = ()
    grid: VoxelGrid | None = None
    name: str = "volume"
    digest: str = ""

    def exact(
        self, shape: Sequence[int], spacing: Sequence[float], origin: Sequence[float]
    ) -> VoxelGrid:
        """The grid that a format's own numbers state, in the table's digits where both agree.

        ``origin`` is the low corner of the first voxel, mm.
        """
        stated = VoxelGrid(
            shape=(shape[0], shape[1], shape[2]),
            spacing=(spacing[0], spacing[1], spacing[2]),
            origin=(origin[0], origin[1], origin[2]),
        )
        kept = self.grid
        if kept is None or kept.shape != stated.shape:
            return stated
        least = min(kept.spacing)
        for axis in range(3):
            reach = least + abs(kept.origin[axis]) * 0.1 + kept.spacing[axis] * kept.shape[axis]
            if (
                abs(kept.spacing[axis] - stated.spacing[axis]) > _AGREE * kept.spacing[axis]
                or abs(kept.origin[axis] - stated.origin[axis]) > _AGREE * reach
            ):
                return stated
        return kept


def table_of(volume: Volume) -> dict[str, Any]:
    """The table as plain data."""
    rows = []
    for label in sorted({*volume.names, *volume.blends}):
        row: dict[str, Any] = {"label": label, "name": volume.names.get(label, f"label {label}")}
        if label in volume.blends:
            row["fractions"] = dict(volume.blends[label].fractions)
        rows.append(row)
    return {
        "format": "voxelmat label table",
        "format_number": _FORMAT,
        "name": volume.name,
        "unit": "mm",
        "grid": volume.grid.as_dict(),
        "labels": rows,
        "resins": [_finite(m.as_dict()) for m in volume.resins],
        "values_sha256": _digest(volume.values),
    }


def _finite(value: Any) -> Any:
    """Plain data with infinities as text, which JSON has no number for."""
    if isinstance(value, dict):
        return {k: _finite(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [_finite(v) for v in value]
    return str(value) if isinstance(value, float) and math.isinf(value) else value


def _infinite(value: Any) -> Any:
    """The inverse of `_finite`."""
    if isinstance(value, dict):
        return {k: _infinite(v) for k, v in value.items()}
    if isinstance(value, list):
        return [_infinite(v) for v in value]
    return float(value) if value in ("inf", "-inf") else value


def _digest(values: NDArray[Any]) -> str:
    """SHA-256 of the values, x fastest, little-endian."""
    code = hashlib.sha256()
    for k in range(values.shape[2]):
        plane = np.ascontiguousarray(values[:, :, k].T)
        code.update(plane.astype(plane.dtype.newbyteorder("<"), copy=False).data)
    return code.hexdigest()


def labelled(
    path: Path,
    turned: Straight,
    table: LabelTable,
    *,
    names: Mapping[int, str] | None = None,
    occupancy: NDArray[np.uint8] | None = None,
    distance: NDArray[np.int8] | None = None,
) -> Volume:
    """Join what a format holds and what the table says.

    Where the values are not those that the table was written with, its occupancy and distance no
    longer belong to them; they are left out and a note says so.
    """
    volume = Volume(
        grid=table.exact(turned.values.shape, turned.spacing, turned.origin),
        values=turned.values,
        names={**(names or {}), **table.names},
        blends=table.blends,
        resins=table.resins,
        name=table.name if table.grid else path.name.split(".")[0],
        source=path.name,
    )
    if not table.digest or table.digest == _digest(volume.values):
        return replace(volume, occupancy=occupancy, distance=distance)
    note = "The values were changed, or some are lost, since voxelmat wrote the file"
    if occupancy is not None or distance is not None:
        note += "; the partly full voxels and the signed distance were left out"
    return replace(volume, notes=(note + ".",))


def parse_table(text: str, file: str) -> LabelTable:
    """Read a table.

    Raises
    ------
    FileFormatError
        Where it is not one, or of another version.
    """
    try:
        data = json.loads(text)
        if data["format"] != "voxelmat label table" or data["format_number"] != _FORMAT:
            raise FileFormatError(
                f"{file}: the label table is of format {data.get('format_number')!r}; this version "
                f"reads format {_FORMAT}."
            )
        grid = data["grid"]
        return LabelTable(
            names={int(row["label"]): str(row["name"]) for row in data["labels"]},
            blends={
                int(row["label"]): Blend(tuple(sorted(row["fractions"].items())))
                for row in data["labels"]
                if "fractions" in row
            },
            resins=tuple(material_of(_infinite(m)) for m in data["resins"]),
            grid=VoxelGrid(
                shape=tuple(grid["shape"]),
                spacing=tuple(grid["spacing_mm"]),
                origin=tuple(grid["origin_mm"]),
            ),
            name=str(data["name"]),
            digest=str(data.get("values_sha256", "")),
        )
    except FileFormatError:
        raise
    except (ValueError, KeyError, TypeError, AttributeError, RecursionError) as error:
        raise FileFormatError(
            f"{file}: its label table is damaged ({error}). Delete the table to read the labels "
            "alone."
        ) from error


def sidecar(path: Path) -> Path:
    """Where the table of a volume file lies: ``part.nii.gz`` has ``part.nii.gz.labels.json``."""
    return path.with_name(path.name + ".labels.json")


def write_beside(volume: Volume, path: Path) -> Path:
    """Write the table beside a volume file."""
    place = sidecar(path)
    write_json(place, table_of(volume))
    return place


def read_beside(path: Path) -> LabelTable | None:
    """The table beside a volume file, or None where there is none."""
    place = sidecar(path)
    if not place.is_file():
        return None
    if place.stat().st_size > _LARGEST:
        raise InputError(f"The label table is larger than {_LARGEST} bytes.", file=str(place))
    try:
        text = place.read_text(encoding="utf-8")
    except UnicodeDecodeError as error:
        raise FileFormatError(f"{place.name} is not UTF-8 text ({error}).") from error
    return parse_table(text, place.name)

"""What the labels of a volume stand for, as JSON: inside a format where it has a place, and beside.

The table also keeps the grid in full double precision, for formats that hold less.
"""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from voxelmat.errors import FileFormatError, InputError
from voxelmat.io.atomic import write_json
from voxelmat.io.store import material_of
from voxelmat.model.blend import Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.material import Material
from voxelmat.model.volume import Volume

__all__ = [
    "KEY", "LabelTable", "parse_table", "read_beside", "sidecar", "table_of", "write_beside",
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
        "resins": [m.as_dict() for m in volume.resins],
    }


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
            resins=tuple(material_of(m) for m in data["resins"]),
            grid=VoxelGrid(
                shape=tuple(grid["shape"]),
                spacing=tuple(grid["spacing_mm"]),
                origin=tuple(grid["origin_mm"]),
            ),
            name=str(data["name"]),
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

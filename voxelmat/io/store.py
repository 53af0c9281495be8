"""A part on disk: one compressed .npz with the arrays and a JSON head, checked when read."""

from __future__ import annotations

import json
import zipfile
from pathlib import Path
from typing import Any

import numpy as np

from voxelmat.errors import FileFormatError
from voxelmat.io.atomic import aside
from voxelmat.model.blend import Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.laws import BlendLaw
from voxelmat.model.material import Constant, Material, TemperatureFactor
from voxelmat.model.part import Part

__all__ = ["load_part", "material_of", "save_part"]

_FORMAT = 1


def save_part(part: Part, path: Path) -> None:
    """Write a part; the law is named, not stored.

    Raises
    ------
    ResourceError
        Where the disk refuses; nothing is left half-written.
    """
    head = {
        "format": _FORMAT,
        "name": part.name,
        "grid": part.grid.as_dict(),
        "palette": [list(b.fractions) for b in part.palette],
        "resins": [m.as_dict() for m in part.resins],
        "bodies": list(part.bodies),
        "law": repr(part.law),
        "digest": part.digest,
    }
    arrays: dict[str, Any] = {"labels": part.labels}
    for key in ("distance", "occupancy"):
        if getattr(part, key) is not None:
            arrays[key] = getattr(part, key)
    for n, mask in enumerate(part.bodies.values()):
        arrays[f"body_{n}"] = np.packbits(mask.ravel(order="F"))
    with aside(path) as temporary, temporary.open("wb") as handle:
        np.savez_compressed(handle, head=np.array(json.dumps(head)), **arrays)


def material_of(record: dict[str, Any]) -> Material:
    """A resin from its plain data."""
    fields = dict(record)
    for key, value in record.items():
        if isinstance(value, dict) and "factor" in value:
            course: dict[str, Any] = {
                k: tuple(v) if isinstance(v, list) else v for k, v in value.items()
            }
            fields[key] = TemperatureFactor(**course)
        elif isinstance(value, dict):
            fields[key] = Constant(**value)
        elif isinstance(value, list):
            fields[key] = tuple(value)
    return Material(**fields)


def load_part(path: Path, law: BlendLaw) -> Part:
    """Read a part that `save_part` wrote.

    Parameters
    ----------
    path : Path
    law : BlendLaw
        The law that the part was made with.

    Raises
    ------
    FileFormatError
        Where the file is cut short, was changed, is of another format, or was made with
        another law.
    """
    try:
        # Opened here, because numpy leaves a file open when it is not a whole archive.
        with path.open("rb") as handle, np.load(handle, allow_pickle=False) as data:
            head = json.loads(str(data["head"]))
            if head.get("format") != _FORMAT:
                raise FileFormatError(
                    f"'{path}' is a part of format {head.get('format')}; this version of voxelmat "
                    f"reads format {_FORMAT}."
                )
            grid = VoxelGrid(
                shape=tuple(head["grid"]["shape"]),
                spacing=tuple(head["grid"]["spacing_mm"]),
                origin=tuple(head["grid"]["origin_mm"]),
            )
            bodies = {
                name: np.unpackbits(data[f"body_{n}"], count=grid.n_voxels)
                .astype(bool)
                .reshape(grid.shape, order="F")
                for n, name in enumerate(head["bodies"])
            }
            part = Part(
                grid=grid,
                resins=tuple(material_of(m) for m in head["resins"]),
                palette=tuple(Blend(tuple((n, f) for n, f in b)) for b in head["palette"]),
                labels=data["labels"],
                distance=data.get("distance"),
                occupancy=data.get("occupancy"),
                bodies=bodies,
                law=law,
                name=head["name"],
            )
    except (OSError, KeyError, ValueError, TypeError, EOFError, zipfile.BadZipFile) as error:
        if isinstance(error, FileFormatError):
            raise
        raise FileFormatError(
            f"'{path}' is not a whole part file ({error}); delete it and make the part again."
        ) from error
    if head["law"] != repr(law):
        raise FileFormatError(
            f"'{path}' was made with the blend law {head['law']}, not {law!r}; make it again."
        )
    if part.digest != head["digest"]:
        raise FileFormatError(f"'{path}' was changed after it was written; make it again.")
    return part

"""Writes OME-Zarr 0.5 (Zarr v3): resin fractions as an image, with the exact labels beside it.

The image has channels c, z, y, x: the solid fraction and the fraction of each resin, in 255ths.
``labels/material`` holds the exact labels with names and colours; ``distance`` the signed distance.
Needs zarr.
"""

from __future__ import annotations

import shutil
import tempfile
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.io.atomic import explain_os_error
from voxelmat.io.label_table import KEY, table_of
from voxelmat.io.volume_limits import needed
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import DISTANCE_STEPS
from voxelmat.model.volume import Volume

__all__ = ["write_omezarr"]

_VERSION = "0.5"
_CHUNK = 64


def _multiscales(grid: VoxelGrid, name: str, *, channels: bool) -> list[dict[str, Any]]:
    space = [{"name": n, "type": "space", "unit": "millimeter"} for n in "zyx"]
    lead = [{"name": "c", "type": "channel"}] if channels else []
    one, zero = [1.0] * len(lead), [0.0] * len(lead)
    # A translation places the centre of the first voxel, as readers of the format take it.
    centre = [o + h / 2 for o, h in zip(grid.origin, grid.spacing, strict=True)]
    steps = [
        {"type": "scale", "scale": one + list(grid.spacing[::-1])},
        {"type": "translation", "translation": zero + centre[::-1]},
    ]
    return [
        {
            "name": name,
            "axes": lead + space,
            "datasets": [{"path": "0", "coordinateTransformations": steps}],
        }
    ]


def _colours(count: int) -> list[list[int]]:
    """Distinct colours round the hue circle, a golden angle apart."""
    hues = (np.arange(count) * 0.618033988749895) % 1.0
    rgb = 0.5 + 0.45 * np.cos(2 * np.pi * (hues[:, None] + np.array([0.0, -1 / 3, 1 / 3])))
    return [[*row, 255] for row in np.rint(255 * rgb).astype(int).tolist()]


def _array(group: Any, values: NDArray[Any], axes: list[str]) -> None:
    """An array of a group, written slab by slab along z, values given as ``[.., z, y, x]``."""
    chunks = tuple(
        1 if a == "c" else min(_CHUNK, n) for a, n in zip(axes, values.shape, strict=True)
    )
    array = group.create_array(
        "0", shape=values.shape, chunks=chunks, dtype=values.dtype, dimension_names=axes
    )
    z = axes.index("z")
    for first in range(0, values.shape[z], _CHUNK):
        where = (*(slice(None),) * z, slice(first, first + _CHUNK))
        array[where] = np.ascontiguousarray(values[where])


def _fill(root: Any, volume: Volume) -> None:
    grid = volume.grid
    root.attrs[KEY] = table_of(volume)
    labels = volume.values.T
    solid = (labels > 0).astype(np.uint8) * np.uint8(255)
    if volume.occupancy is not None:
        solid = volume.occupancy.T
    planes, titles, colours = [solid], ["solid fraction"], ["FFFFFF"]
    for resin in volume.resins:
        share = np.zeros(int(volume.values.max(initial=0)) + 1)
        for label, blend in volume.blends.items():
            if label < len(share):
                share[label] = blend.fraction(resin.name)
        if share.any():
            planes.append(np.rint(share[labels] * solid).astype(np.uint8))
            titles.append(resin.name)
            colours.append(resin.colour.lstrip("#").upper())
    root.attrs["ome"] = {
        "version": _VERSION,
        "multiscales": _multiscales(grid, volume.name, channels=True),
        "omero": {
            "channels": [
                {"label": t, "color": c, "active": True,
                 "window": {"min": 0, "max": 255, "start": 0, "end": 255}}
                for t, c in zip(titles, colours, strict=True)
            ]
        },
    }  # fmt: skip
    _array(root, np.stack(planes), ["c", "z", "y", "x"])
    folder = root.create_group("labels")
    folder.attrs["ome"] = {"version": _VERSION, "labels": ["material"]}
    material = folder.create_group("material")
    known = sorted({*volume.names, *volume.blends})
    material.attrs["ome"] = {
        "version": _VERSION,
        "multiscales": _multiscales(grid, "material", channels=False),
        "image-label": {
            "version": _VERSION,
            "colors": [
                {"label-value": n, "rgba": c}
                for n, c in zip(known, _colours(len(known)), strict=True)
            ],
            "properties": [{"label-value": n, "name": volume.names.get(n, "")} for n in known],
            "source": {"image": "../../"},
        },
    }
    _array(material, labels, ["z", "y", "x"])
    if volume.distance is not None:
        distance = root.create_group("distance")
        step = min(grid.spacing) / DISTANCE_STEPS
        distance.attrs["ome"] = {
            "version": _VERSION,
            "multiscales": _multiscales(
                grid, f"signed distance, {step!r} mm a step", channels=False
            ),
        }
        _array(distance, volume.distance.T, ["z", "y", "x"])


def write_omezarr(volume: Volume, path: Path) -> None:
    """Write a folder ``*.ome.zarr``; it is whole or not there.

    Raises
    ------
    InputError
        Grey values; something else than a Zarr folder is at the place.
    ResourceError
        If it cannot be written.
    """
    zarr = needed("zarr", "zarr")
    if not volume.is_labels:
        raise InputError("Labels are written as OME-Zarr; these are grey values.", file=path.name)
    if path.exists() and not (path / "zarr.json").is_file():
        raise InputError(
            "Something that is no Zarr folder is at this place; choose another name.",
            file=str(path),
        )
    try:
        aside = Path(tempfile.mkdtemp(prefix=f".{path.name}.", dir=path.parent))
    except OSError as error:
        raise explain_os_error(path, error) from error
    try:
        new = aside / "new"
        _fill(zarr.create_group(store=str(new), zarr_format=3), volume)
        if path.exists():
            path.replace(aside / "old")
        new.replace(path)
    except OSError as error:
        if (aside / "old").exists() and not path.exists():
            (aside / "old").replace(path)
        raise explain_os_error(path, error) from error
    finally:
        shutil.rmtree(aside, ignore_errors=True)

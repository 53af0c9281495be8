"""OME-Zarr 0.5 (Zarr v3): resin fractions as an image with the labels beside it, out and in.

The image has channels c, z, y, x: the solid fraction and the fraction of each resin, in 255ths.
``labels/material`` holds the exact labels with names and colours; ``distance`` the signed distance.
Needs zarr.
"""

from __future__ import annotations

import json
import shutil
import tempfile
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import FileFormatError, InputError
from voxelmat.io.atomic import explain_os_error
from voxelmat.io.axes import millimetres, straighten
from voxelmat.io.label_table import KEY, LabelTable, labelled, parse_table, read_beside, table_of
from voxelmat.io.volume_limits import check_size, needed
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import DISTANCE_STEPS
from voxelmat.model.volume import Volume

__all__ = ["read_omezarr", "write_omezarr"]

_VERSION = "0.5"
_CHUNK = 64
_MOST_CHUNK_BYTES = 1 << 28
_CODECS = {"bytes", "zstd", "gzip", "blosc", "crc32c", "transpose", "sharding_indexed"}


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


class _Scale:
    """The finest level of a multiscale image: its array, axes and transforms."""

    def __init__(self, group: Any, file: str) -> None:
        self.file = file
        meta = _ome(group)
        try:
            scales = meta["multiscales"][0]
            self.axes = scales["axes"]
            first = scales["datasets"][0]
            self.array = group[str(first["path"])]
            self.steps = [
                *first.get("coordinateTransformations", []),
                *scales.get("coordinateTransformations", []),
            ]
            self.names = [str(a["name"]) for a in self.axes]
            self.kinds = [str(a.get("type", "")) for a in self.axes]
            shape = tuple(int(n) for n in self.array.shape)
        except (KeyError, IndexError, TypeError, AttributeError) as error:
            raise FileFormatError(f"{file}: its image metadata are damaged ({error!r}).") from error
        if len(shape) != len(self.axes):
            raise FileFormatError(
                f"{file}: {len(self.axes)} axes are named, {len(shape)} are there."
            )
        self.shape = shape
        self._check()

    def _check(self) -> None:
        space = [n for n, k in enumerate(self.kinds) if k == "space"]
        if len(space) != 3 or sorted(self.names[n] for n in space) != ["x", "y", "z"]:
            raise InputError(
                f"The axes are {self.names}; a volume along x, y and z is read.", file=self.file
            )
        for n, name in enumerate(self.names):
            if n not in space and name == "t" and self.shape[n] > 1:
                raise InputError(
                    f"The file holds a series of {self.shape[n]} times; save one.", file=self.file
                )
        self.space = space
        dtype = np.dtype(self.array.dtype)
        if dtype.kind not in "iufb":
            raise InputError(f"Values of type {dtype} are not read.", file=self.file)
        check_size(self.file, self.shape, dtype.itemsize)
        check_size(self.file, self.array.chunks, dtype.itemsize)
        if int(np.prod(self.array.chunks, dtype=object)) * dtype.itemsize > _MOST_CHUNK_BYTES:
            raise FileFormatError(f"{self.file}: its chunks of {self.array.chunks} are too large.")
        codecs = [c.get("name") for c in self.array.metadata.to_dict().get("codecs", [])]
        odd = [c for c in codecs if c not in _CODECS]
        if odd:
            raise FileFormatError(f"{self.file} is packed with '{odd[0]}', which is not read.")

    def placing(self, unit: str | None) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Directions (columns, stored axis order) and centre of the first voxel, mm."""
        stated = {self.axes[n].get("unit") for n in self.space}
        if len(stated) > 1:
            raise InputError(f"The axes have different units: {stated}.", file=self.file)
        factor = millimetres(stated.pop(), unit, self.file)
        scale, shift = np.ones(len(self.axes)), np.zeros(len(self.axes))
        for step in self.steps:
            kind = step.get("type")
            if kind not in ("scale", "translation", "identity"):
                raise InputError(f"A transform of type '{kind}' is not read.", file=self.file)
            values = np.asarray(step.get(kind, np.ones(len(self.axes))), dtype=np.float64)
            if kind == "identity":
                continue
            if values.shape != scale.shape:
                raise FileFormatError(f"{self.file}: a {kind} needs {len(self.axes)} values.")
            if kind == "scale":
                scale, shift = scale * values, shift * values
            else:
                shift = shift + values
        rows = {"x": 0, "y": 1, "z": 2}
        directions, centre = np.zeros((3, 3)), np.zeros(3)
        for column, n in enumerate(self.space):
            row = rows[self.names[n]]
            directions[row, column] = factor * scale[n]
            centre[row] = factor * shift[n]
        return directions, centre

    def values(self, channel: int) -> NDArray[Any]:
        """One channel, in the stored order of its space axes."""
        where: list[Any] = []
        for n, name in enumerate(self.names):
            if n in self.space:
                where.append(slice(None))
            elif self.kinds[n] == "channel" or name == "c":
                if not 0 <= channel < self.shape[n]:
                    raise InputError(
                        f"The file has {self.shape[n]} channels; number {channel} is not there.",
                        file=self.file,
                        key="channel",
                    )
                where.append(channel)
            else:
                where.append(0)
        return np.asarray(self.array[tuple(where)])


def _ome(group: Any) -> dict[str, Any]:
    """The metadata of version 0.5, or of the versions before."""
    attrs = dict(group.attrs)
    inner = attrs.get("ome", attrs)
    return inner if isinstance(inner, dict) else {}


def _label_group(root: Any, wanted: str | None, file: str) -> Any | None:
    """The label image that was asked for, or the first one; None where there are none."""
    if "labels" not in root:
        names: list[str] = []
    else:
        names = [str(n) for n in _ome(root["labels"]).get("labels", [])]
    if wanted is None:
        return root["labels"][names[0]] if names else None
    if wanted not in names:
        raise InputError(
            f"There are no labels '{wanted}'; there are {names}.", file=file, key="field"
        )
    return root["labels"][wanted]


def read_omezarr(
    path: Path, unit: str | None = None, *, field: str | None = None, channel: int | None = None
) -> Volume:
    """Read the labels of an OME-Zarr folder, or one channel of its image.

    Parameters
    ----------
    field : str, optional
        Name of the label image; the first where left out.
    channel : int, optional
        Read this channel of the image instead.

    Raises
    ------
    InputError
        Missing unit, a time series, axes that are not x, y, z, unknown labels or channels.
    FileFormatError
        Damaged metadata or chunks; arrays or chunks larger than is read.
    """
    zarr = needed("zarr", "zarr")
    file = path.name
    try:
        root = zarr.open_group(store=str(path), mode="r")
        group = root if channel is not None else _label_group(root, field, file)
        scale = _Scale(root if group is None else group, file)
        directions, centre = scale.placing(unit)
        turned = straighten(scale.values(channel or 0), directions, centre, file)
        inside = root.attrs.get(KEY)
        table = read_beside(path)
        if table is None:
            table = parse_table(json.dumps(inside), file) if inside else LabelTable()
        ours = table.grid is not None and group is not None and channel is None
        occupancy = _plane(root, np.uint8) if ours else None
        distance = _plane(root["distance"], np.int8) if ours and "distance" in root else None
    except (InputError, FileFormatError):
        raise
    except Exception as error:
        raise FileFormatError(
            f"{file} is no whole OME-Zarr folder ({type(error).__name__}: {error})."
        ) from error
    if channel is not None:
        grey = turned.values.astype(np.float32)
        return labelled(path, replace(turned, values=grey), LabelTable())
    shape = turned.values.shape
    if occupancy is not None and np.array_equal(occupancy, 255 * (turned.values > 0)):
        occupancy = None
    return labelled(
        path,
        turned,
        table,
        names=_names(group),
        occupancy=occupancy if occupancy is not None and occupancy.shape == shape else None,
        distance=distance if distance is not None and distance.shape == shape else None,
    )


def _plane(group: Any, dtype: type) -> NDArray[Any] | None:
    """An image of ours as ``[i, j, k]``, if it is of the type that we write."""
    values = _Scale(group, "the image").values(0)
    return np.asfortranarray(values.T) if values.dtype == dtype else None


def _names(group: Any | None) -> dict[int, str]:
    """Label names from the format's own properties."""
    if group is None:
        return {}
    rows = _ome(group).get("image-label", {}).get("properties", [])
    return {
        int(row["label-value"]): str(row["name"])
        for row in rows
        if isinstance(row, dict) and row.get("name") and "label-value" in row
    }

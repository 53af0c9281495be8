"""Reads OME-Zarr folders (Zarr v3 and v2): labels with their names, or a channel of the image.

Sizes are judged by the metadata before anything is read. Needs zarr.
"""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import FileFormatError, InputError
from voxelmat.io.axes import millimetres, straighten
from voxelmat.io.label_table import KEY, LabelTable, labelled, parse_table, read_beside
from voxelmat.io.volume_limits import check_size, needed
from voxelmat.model.volume import Volume

__all__ = ["read_omezarr"]

_MOST_CHUNK_BYTES = 1 << 28
_CODECS = {"bytes", "zstd", "gzip", "blosc", "crc32c", "transpose", "sharding_indexed"}


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

"""The planes of a design that a slicer walks through, made as they are asked for."""

from __future__ import annotations

import shutil
import tempfile
import weakref
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.io.atomic import explain_os_error
from voxelmat.io.bigpart import AnyPart, StoredPart
from voxelmat.kernels.halftone import extend_plane
from voxelmat.printing.raster import Raster
from voxelmat.printing.support import PlaneRow, SupportFill, outline_values

__all__ = [
    "BLOCK_BYTES",
    "SUPPORT_IN_MEMORY",
    "DesignPlane",
    "DesignPlanes",
    "PlaneCursor",
    "PlaneFile",
]

#: A support field up to this size, bytes, is kept in memory; a larger one in a file.
SUPPORT_IN_MEMORY = 256 << 20
#: A cursor reads planes of so many bytes in all at a time, or one plane where it is larger, or
#: a few that a store keeps together.
BLOCK_BYTES = 16 << 20


class PlaneFile:
    """Int8 planes in a raw file; read and written one at a time, never mapped.

    A mapped page counts as memory of the process that touched it, which would make the peak
    grow with the layers. Safe to read from several threads and processes.

    Parameters
    ----------
    path : Path
        Made, full of zeros, if it is not there.
    shape : tuple of int
        Layers, rows, columns.

    Raises
    ------
    ResourceError
        Where the disk refuses.
    """

    def __init__(self, path: Path, shape: tuple[int, int, int]) -> None:
        self.path = path
        self.shape = shape
        self._size = shape[1] * shape[2]
        if not path.exists():
            try:
                with path.open("wb") as handle:
                    handle.truncate(self._size * shape[0])
            except OSError as error:
                raise explain_os_error(path, error) from error

    def __getitem__(self, k: int) -> NDArray[np.int8]:
        """Read plane `k`."""
        plane = np.fromfile(self.path, np.int8, self._size, offset=k * self._size)
        return plane.reshape(self.shape[1:])

    def __setitem__(self, k: int, plane: NDArray[np.int8]) -> None:
        """Write plane `k`."""
        try:
            with self.path.open("r+b") as handle:
                handle.seek(k * self._size)
                handle.write(np.ascontiguousarray(plane, np.int8).tobytes())
        except OSError as error:
            raise explain_os_error(self.path, error) from error


@dataclass(frozen=True, slots=True)
class DesignPlane:
    """One plane of voxels in image order, axes of one voxel doubled.

    Attributes
    ----------
    labels : ndarray of uint16, shape (rows, columns)
        Labels of printed blends, carried one voxel beyond the part; 0 where there is none.
    outlines : ndarray of int8, shape (1 or 2, rows, columns)
        Negative inside the part, and inside part or support.
    """

    labels: NDArray[np.uint16]
    outlines: NDArray[np.int8]


class DesignPlanes:
    """The planes of one part on one raster, for any orientation; safe to use from threads.

    Parameters
    ----------
    part : Part or StoredPart
        Its arrays are read plane by plane or block by block, never copied whole.
    raster : Raster
    support : SupportFill, optional
        Fills the field of part and support, once, when the object is made.
    support_file : Path, optional
        Where a support field is kept that is larger than `SUPPORT_IN_MEMORY`; a temporary
        file if left out. A file that is there is taken as filled, so that several processes
        share one.

    Attributes
    ----------
    shape : tuple of int
        Design voxels along layers, rows and columns, no axis below 2.
    """

    def __init__(
        self,
        part: AnyPart,
        raster: Raster,
        *,
        support: SupportFill | None = None,
        support_file: Path | None = None,
    ) -> None:
        self._part = part
        self._axes = raster.part_axes()
        self._printed = part.printed_labels()
        self._true_shape = tuple(part.grid.shape[a] for a, _ in self._axes)
        self.shape = tuple(max(n, 2) for n in self._true_shape)
        self._support: PlaneRow | None = None
        if support is not None:
            self._support = self._filled(support, support_file)

    @property
    def n_fields(self) -> int:
        """Outline fields of a plane: 1, or 2 with support."""
        return 1 if self._support is None else 2

    def cursor(self, first: int = 0, last: int | None = None) -> PlaneCursor:
        """A reader of planes ``first`` to ``last - 1`` (all if left out), for one thread."""
        n = self._true_shape[0]
        return PlaneCursor(self, min(first, n - 1), n if last is None else min(last, n))

    def _block(self, name: str, first: int, last: int) -> NDArray[Any] | None:
        """Planes ``first`` to ``last - 1`` of one array of the part, ``[layer, row, column]``."""
        array = getattr(self._part, name)
        if array is None:
            return None
        axis, sign = self._axes[0]
        n = self._true_shape[0]
        index = [slice(None)] * 3
        index[axis] = slice(first, last) if sign > 0 else slice(n - last, n - first)
        view = np.asarray(array[tuple(index)]).transpose([a for a, _ in self._axes])
        return view[tuple(slice(None, None, s) for _, s in self._axes)]

    @property
    def n_planes(self) -> int:
        """Planes of the design, an axis of one voxel not doubled."""
        return int(self._true_shape[0])

    def raw_labels(self, first: int, last: int) -> NDArray[np.uint16]:
        """Labels of planes ``first`` to ``last - 1`` as they are in the part."""
        labels = self._block("labels", first, last)
        if labels is None:
            raise InputError(f"Part '{self._part.name}' has no labels.")
        return np.ascontiguousarray(labels)

    @property
    def together(self) -> int:
        """Planes that the part's store keeps together, where layers lie along z; else 1."""
        along_z = self._axes[0][0] == 2
        return self._part.slab if along_z and isinstance(self._part, StoredPart) else 1

    def aligned(self, k: int, step: int) -> tuple[int, int]:
        """First and last plane of the block of `step` planes that holds `k`."""
        n, sign = self._true_shape[0], self._axes[0][1]
        if sign > 0:
            first = k // step * step
            return first, min(first + step, n)
        last = (n - 1 - k) // step * step  # the store counts from the other end
        return max(n - last - step, 0), n - last

    def read(self, first: int, last: int) -> Iterator[tuple[NDArray[np.uint16], NDArray[np.int8]]]:
        """Raw labels and the outline field of each of the planes ``first`` to ``last - 1``."""
        labels = self._block("labels", first, last)
        if labels is None:
            raise InputError(f"Part '{self._part.name}' has no labels.")
        distance, occupancy = (self._block(f, first, last) for f in ("distance", "occupancy"))
        for m, plane in enumerate(labels):
            fields = (None if f is None else f[m] for f in (distance, occupancy))
            yield plane, outline_values(self._printed, plane, *fields)

    def _filled(self, fill: SupportFill, path: Path | None) -> PlaneRow:
        n, rows, columns = self._true_shape
        field: PlaneRow
        if path is None and n * rows * columns <= SUPPORT_IN_MEMORY:
            field = np.empty((n, rows, columns), np.int8)
        else:
            if path is None:
                folder = tempfile.mkdtemp(prefix="voxelmat-")
                weakref.finalize(self, shutil.rmtree, folder, ignore_errors=True)
                path = Path(folder) / "support.raw"
            elif path.exists():
                return PlaneFile(path, (n, rows, columns))
            field = PlaneFile(path, (n, rows, columns))
        fill(self.cursor().outline, field)
        return field


class PlaneCursor:
    """Walks through the planes of a design, up or down, and remembers those round it.

    Made by `DesignPlanes.cursor`; for one thread.
    """

    def __init__(self, planes: DesignPlanes, first: int, last: int) -> None:
        self._planes = planes
        n, rows, columns = planes._true_shape
        self._low, self._high = max(first - 1, 0), min(last + 1, n)
        step = max(1, BLOCK_BYTES // (4 * rows * columns))
        self._step = max(1, step // planes.together) * planes.together
        self._known: dict[int, tuple[NDArray[np.uint16], NDArray[np.int8]]] = {}
        self._made: dict[int, DesignPlane] = {}

    def _raw(self, k: int) -> tuple[NDArray[np.uint16], NDArray[np.int8]]:
        if k not in self._known:
            # Steps are counted from where the store's are, for a block may be costly to read.
            first, last = self._planes.aligned(k, self._step)
            if self._planes.together == 1:
                first, last = max(first, min(self._low, k)), min(last, max(self._high, k + 1))
            # Copies, for a view would keep all of the last block in memory.
            near = {m: (a.copy(), b.copy()) for m, (a, b) in self._known.items() if abs(m - k) <= 2}
            self._known = near  # lets go of the last block before the next is read
            for m, planes in enumerate(self._planes.read(first, last), start=first):
                self._known[m] = planes
        return self._known[k]

    def outline(self, k: int) -> NDArray[np.int8]:
        """The part's outline field on plane `k`, axes not doubled."""
        return self._raw(k)[1]

    def labels(self, k: int) -> NDArray[np.uint16]:
        """Labels of plane `k`, carried one voxel beyond what is printed, axes not doubled."""
        window = range(max(k - 1, 0), min(k + 2, self._planes._true_shape[0]))
        planes = np.stack([self._raw(m)[0] for m in window])
        out = np.empty(planes.shape[1:], np.uint16)
        extend_plane(planes, k - window.start, self._planes._printed, out)
        return out

    def plane(self, k: int) -> DesignPlane:
        """Plane `k`; the plane above the only one is that one again."""
        k = min(k, self._planes._true_shape[0] - 1)
        if k not in self._made:
            self._made = {m: v for m, v in self._made.items() if abs(m - k) <= 1}
            fields = [self.outline(k)]
            if self._planes._support is not None:
                fields.append(self._planes._support[k])
            self._made[k] = DesignPlane(_doubled(self.labels(k)), _doubled(np.stack(fields)))
        return self._made[k]


def _doubled(array: NDArray[Any]) -> NDArray[Any]:
    """Repeat rows or columns where there is but one, so that every site lies between two."""
    for axis in (-2, -1):
        if array.shape[axis] == 1:
            array = np.repeat(array, 2, axis=axis)
    return np.ascontiguousarray(array)

"""Voxelise a mesh straight into a part store, some planes at a time, whatever the grid's size."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.io.bigpart import StoredPart
from voxelmat.io.bigpart_write import SLAB, fill_big_part
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.material import Material
from voxelmat.model.mesh import TriangleMesh
from voxelmat.monitor import SILENT, Monitor
from voxelmat.provenance import text_digest
from voxelmat.shape.voxelise import voxelise

__all__ = ["voxelise_to_store"]

_HALO = 2  # planes on each side, so that where shells join the same neighbours are seen
_MOST_VOXELS = 16 << 20  # at a time


def voxelise_to_store(
    mesh: TriangleMesh,
    grid: VoxelGrid,
    resin: Material,
    folder: str | Path,
    *,
    kind: str = "zarr",
    monitor: Monitor = SILENT,
    resume: bool = True,
) -> StoredPart:
    """A part of one resin from a closed mesh, on a grid that need not fit into memory.

    Parameters
    ----------
    mesh : TriangleMesh
    grid : VoxelGrid
    resin : Material
    folder, kind, monitor, resume
        As for `voxelmat.io.bigpart_write.fill_big_part`.

    Raises
    ------
    InputError
        If the mesh is open or inside out.
    ResourceError
        Where the disk refuses.
    """
    source = {
        "vertices": np.asarray(mesh.vertices, np.float64).tobytes().hex(),
        "faces": np.asarray(mesh.faces, np.int64).tobytes().hex(),
    }
    return fill_big_part(
        folder,
        _Slabs(mesh, grid),
        grid=grid,
        resins=(resin,),
        palette=(EMPTY, Blend.pure(resin.name)),
        arrays=("labels", "distance", "occupancy"),
        source=text_digest(source),
        name=mesh.name,
        kind=kind,
        monitor=monitor,
        resume=resume,
    )


class _Slabs:
    """Gives the store its slabs; voxelises several at once, for each call looks at all faces."""

    def __init__(self, mesh: TriangleMesh, grid: VoxelGrid) -> None:
        self._mesh = mesh
        self._grid = grid
        few = _MOST_VOXELS // (grid.shape[0] * grid.shape[1]) - 2 * _HALO
        self._step = max(1, few // SLAB) * SLAB
        self._first = -1
        self._made: dict[str, NDArray[Any]] = {}

    def __call__(self, first: int, last: int) -> dict[str, NDArray[Any]]:
        start = first // self._step * self._step
        if start != self._first:
            self._first, self._made = start, self._planes(start)
        return {n: a[:, :, first - start : last - start] for n, a in self._made.items()}

    def _planes(self, start: int) -> dict[str, NDArray[Any]]:
        grid = self._grid
        low = max(start - _HALO, 0)
        high = min(start + self._step + _HALO, grid.shape[2])
        x, y, z = grid.origin
        piece = VoxelGrid(
            shape=(*grid.shape[:2], high - low),
            spacing=grid.spacing,
            origin=(x, y, z + low * grid.spacing[2]),
        )
        shape = voxelise(self._mesh, piece)
        inner = slice(start - low, start - low + self._step)
        occupancy = shape.occupancy[:, :, inner]
        return {
            "labels": np.asarray(occupancy > 0, np.uint16),
            "distance": shape.distance[:, :, inner],
            "occupancy": occupancy,
        }

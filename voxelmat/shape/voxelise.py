"""A closed mesh on a grid: true signed distance and solid fraction of every voxel."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.mesh import TriangleMesh
from voxelmat.monitor import SILENT, Monitor, computing
from voxelmat.shape.seams import close_seams
from voxelmat.shape.shells import boxes_meet, edges_of, shells_of, with_cavities
from voxelmat.shape.tree import LEAF, disc_tree
from voxelmat.shape.words import place_text, voxel_centre

__all__ = ["BAND_SIXTEENTHS", "VoxelShape", "grid_for", "voxelise"]

#: Distances are kept to this many sixteenths of the smallest spacing, on both sides.
BAND_SIXTEENTHS = 127


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class VoxelShape:
    """A body on a grid.

    Attributes
    ----------
    grid : VoxelGrid
    distance : (nx, ny, nz) int8, Fortran order
        Signed distance at voxel centres, negative inside, in 1/16 of the smallest
        spacing, clipped to +-127.
    occupancy : (nx, ny, nz) uint8, Fortran order
        Solid fraction of each voxel, 0 to 255.
    cautions : tuple of str
        What was done that the user should know.
    """

    grid: VoxelGrid
    distance: NDArray[np.int8]
    occupancy: NDArray[np.uint8]
    cautions: tuple[str, ...] = ()

    @property
    def volume(self) -> float:
        """Solid volume by occupancy, mm^3."""
        return float(self.occupancy.sum(dtype=np.int64)) / 255 * self.grid.voxel_volume


def grid_for(
    meshes: TriangleMesh | Iterable[TriangleMesh],
    spacing: float | Sequence[float],
    *,
    margin_voxels: int = 1,
) -> VoxelGrid:
    """A grid round meshes, with a voxel wall on the low corner of their joint box.

    Parameters
    ----------
    meshes : TriangleMesh or iterable of them
    spacing : float or three floats
        Voxel edge, mm.
    margin_voxels : int
        Empty voxels added on every side.
    """
    several = [meshes] if isinstance(meshes, TriangleMesh) else list(meshes)
    if not several:
        raise InputError("A grid needs at least one mesh to go round; got none.")
    if margin_voxels < 0:
        raise InputError(f"margin_voxels is 0 or more; got {margin_voxels}.")
    edge = [float(h) for h in np.broadcast_to(np.asarray(spacing, dtype=float), (3,))]
    if not all(math.isfinite(h) and h > 0 for h in edge):
        raise InputError(f"Spacing must be positive, in mm; got {spacing}.")
    low = np.min([m.bounds[0] for m in several], axis=0)
    high = np.max([m.bounds[1] for m in several], axis=0)
    # A size that is a whole number of voxels but for rounding gets no extra voxel.
    counts = [
        max(1, math.ceil((b - a) / h * (1 - 1e-12) - 1e-9))
        for a, b, h in zip(low, high, edge, strict=True)
    ]
    return VoxelGrid(
        shape=(
            counts[0] + 2 * margin_voxels,
            counts[1] + 2 * margin_voxels,
            counts[2] + 2 * margin_voxels,
        ),
        spacing=(edge[0], edge[1], edge[2]),
        origin=(
            float(low[0]) - margin_voxels * edge[0],
            float(low[1]) - margin_voxels * edge[1],
            float(low[2]) - margin_voxels * edge[2],
        ),
    )


def voxelise(mesh: TriangleMesh, grid: VoxelGrid, *, monitor: Monitor = SILENT) -> VoxelShape:
    """Turn a closed mesh into distance and solid fraction on a grid.

    A voxel centre is inside where the surface winds round it at least once, decided by
    exact integer tests. The solid fraction is the exact volume of the mesh in the voxel,
    rounded to 1/255. The distance is to the nearest triangle.

    Closed shells of one mesh that overlap are joined; a shell that is inside out and lies
    inside another is a cavity.

    Parameters
    ----------
    mesh : TriangleMesh
        Closed, normals outwards; `voxelmat.shape.repair.mend` helps.
    grid : VoxelGrid
        May be smaller or larger than the mesh.
    monitor : Monitor

    Raises
    ------
    InputError
        If the mesh is open or inside out.
    """
    edges = edges_of(mesh.faces)
    if not len(mesh.faces) or edges.turn.any():
        raise InputError(
            f"Mesh '{mesh.name}' is not closed, so it has no inside. Check it with "
            "find_defects(mesh), which says where it is open; mend it there."
        )
    distance = np.full(grid.shape[::-1], BAND_SIXTEENTHS, dtype=np.int8)
    occupancy = np.zeros(grid.shape[::-1], dtype=np.uint8)
    cautions: tuple[str, ...] = ()
    window = _window(mesh, grid)
    if window is not None:
        monitor.report("voxelising", done=0, total=2, faces=len(mesh.faces))
        at, part = window
        occupancy[at], winding = _fill(mesh, part)
        _refuse_inside_out(mesh, part, winding)
        shells = shells_of(mesh, edges)
        groups = with_cavities(mesh, shells) if len(shells) > 1 else []
        overlap = int(winding.max()) > 1
        if len(groups) > 1 and (overlap or boxes_meet(groups)):
            touch = _join(groups, grid, distance, occupancy, monitor)
            cautions = _join_caution(mesh, len(shells), overlap, touch)
        else:
            monitor.report("voxelising", done=1, total=2)
            distance[at] = _distance(mesh, part, winding)
            if overlap:
                close_seams(distance[at], occupancy[at], np.zeros(1, dtype=bool))
                cautions = (
                    f"Mesh '{mesh.name}' crosses itself; what its surface winds round at least "
                    "once was taken as solid.",
                )
    monitor.report("voxelising", done=2, total=2)
    for array in (distance, occupancy):
        array.setflags(write=False)
    return VoxelShape(
        grid=grid,
        distance=distance.transpose(2, 1, 0),
        occupancy=occupancy.transpose(2, 1, 0),
        cautions=cautions,
    )


def _window(
    mesh: TriangleMesh, grid: VoxelGrid
) -> tuple[tuple[slice, slice, slice], VoxelGrid] | None:
    """The part of a grid that a mesh and its band reach: where ([k, j, i]), and its grid."""
    origin, spacing = np.array(grid.origin), np.array(grid.spacing)
    band = BAND_SIXTEENTHS / 16 * spacing.min()
    low, high = mesh.bounds
    first = np.clip(np.floor((low - band - origin) / spacing), 0, grid.shape).astype(int)
    last = np.clip(np.ceil((high + band - origin) / spacing), 0, grid.shape).astype(int)
    if (first >= last).any():
        return None
    i, j, k = (slice(a, b) for a, b in zip(first.tolist(), last.tolist(), strict=True))
    part = VoxelGrid(
        shape=tuple((last - first).tolist()),
        spacing=grid.spacing,
        origin=tuple((origin + first * spacing).tolist()),
    )
    return (k, j, i), part


def _refuse_inside_out(mesh: TriangleMesh, grid: VoxelGrid, winding: NDArray[np.int8]) -> None:
    if int(winding.min()) >= 0:
        return
    k, j, i = (int(axis[0]) for axis in np.nonzero(winding < 0))
    raise InputError(
        f"Mesh '{mesh.name}' is inside out round {place_text(voxel_centre(grid, (i, j, k)))}: its "
        "normals point inwards there. Flip the normals, or mend it with repair allowed."
    )


def _join(
    groups: list[TriangleMesh],
    grid: VoxelGrid,
    distance: NDArray[np.int8],
    occupancy: NDArray[np.uint8],
    monitor: Monitor,
) -> bool:
    """Lay down shells that meet one by one, so that walls inside vanish; whether any met."""
    occupancy[:] = 0
    shared = np.zeros(occupancy.shape, dtype=bool)
    for number, group in enumerate(groups):
        monitor.report("voxelising shells", done=number, total=len(groups))
        window = _window(group, grid)
        if window is None:
            continue
        at, part = window
        more, winding = _fill(group, part)
        distance[at] = np.minimum(distance[at], _distance(group, part, winding))
        shared[at] |= (occupancy[at] > 0) & (more > 0)
        occupancy[at] += np.minimum(more, 255 - occupancy[at])
    close_seams(distance, occupancy, shared)
    return bool(shared.any())


def _join_caution(mesh: TriangleMesh, count: int, overlap: bool, touch: bool) -> tuple[str, ...]:
    if not (overlap or touch):
        return ()
    meet = "overlap" if overlap else "touch"
    return (
        f"Mesh '{mesh.name}' has {count} closed shells, of which some {meet}; they were joined "
        "into one body.",
    )


def _fill(mesh: TriangleMesh, grid: VoxelGrid) -> tuple[NDArray[np.uint8], NDArray[np.int8]]:
    """Solid fraction and winding number, [k, j, i]."""
    from voxelmat.kernels.voxelise import bin_by_plane, fill_planes

    corners = (mesh.triangles - np.array(grid.origin)) / np.array(grid.spacing)
    step = _whole_step(corners, grid)
    whole = np.rint(corners[:, :, 1:] * step).astype(np.int64)
    shape = grid.shape[::-1]
    occupancy = np.empty(shape, dtype=np.uint8)
    winding = np.empty(shape, dtype=np.int8)
    start, member = bin_by_plane(corners, shape[0])
    fill_planes(corners, whole, step, start, member, occupancy, winding)
    return occupancy, winding


def _whole_step(corners: NDArray[np.float64], grid: VoxelGrid) -> int:
    """Whole steps a voxel, a power of two: so fine that products still fit 64 bits."""
    reach = max(float(np.abs(corners).max()), *grid.shape) + 1.0
    bits = 29 - math.ceil(math.log2(reach))
    if bits < 1:
        raise InputError(
            f"The mesh reaches {reach:.3g} voxels from the corner of the grid; it does not "
            "belong to this grid. Check the unit of the mesh and the spacing."
        )
    return int(2 ** min(bits, 24))


def _distance(mesh: TriangleMesh, grid: VoxelGrid, winding: NDArray[np.int8]) -> NDArray[np.int8]:
    """Signed distance, [k, j, i]."""
    from voxelmat.kernels.nearest import signed_distance

    smallest = min(grid.spacing)
    corners = (mesh.triangles - np.array(grid.origin)) / smallest
    edges = corners[:, 1:] - corners[:, :1]
    # A face without area adds nothing: its neighbours have its edges.
    wide = np.linalg.norm(np.cross(edges[:, 0], edges[:, 1]), axis=1) > 0
    if not wide.any():
        raise InputError(f"Mesh '{mesh.name}' has no face with an area. Export it again.")
    corners, edges = corners[wide], edges[wide]
    tree = disc_tree(corners)
    u, v = edges[tree.order].transpose(1, 0, 2)
    products = [np.einsum("ij,ij->i", a, b) for a, b in ((u, u), (u, v), (v, v))]
    triangles = np.concatenate([corners[tree.order, 0], u, v, np.stack(products, axis=1)], axis=1)
    distance = np.empty(grid.shape[::-1], dtype=np.int8)
    pitch = np.array(grid.spacing) / smallest
    with computing():
        signed_distance(tree.nodes, triangles, LEAF, pitch, winding, distance)
    return distance

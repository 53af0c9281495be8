"""Which points lie inside a closed mesh."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray

from voxelmat.errors import InputError
from voxelmat.model.mesh import TriangleMesh

__all__ = ["contains", "winding_number"]

_BITS = 28  # the box of the mesh is 2**28 steps wide, so that products fit 64 bits


def winding_number(mesh: TriangleMesh, points: ArrayLike) -> NDArray[np.int32]:
    """How often the surface winds round each point: 1 inside, 0 outside.

    Parameters
    ----------
    mesh : TriangleMesh
        Closed, normals outwards.
    points : (n, 3) array_like
        mm. A point within 1e-8 of the box's size of the surface may fall on either side.

    Returns
    -------
    (n,) int32
    """
    where = np.asarray(points, dtype=np.float64)
    if where.ndim != 2 or where.shape[1] != 3:
        raise InputError(f"Points form a table of x, y, z in mm; got shape {where.shape}.")
    if not np.isfinite(where).all():
        raise InputError("Points must be finite numbers, in mm.")
    turns = np.zeros(len(where), dtype=np.int32)
    if not len(mesh.faces):
        return turns
    low, high = mesh.bounds
    held = np.flatnonzero(((where >= low) & (where <= high)).all(axis=1))
    if not held.size:
        return turns
    from voxelmat.kernels.winding import winding_at

    raster = _raster(mesh)
    asked = np.rint((where[held, 1:] - low[1:]) * raster.scale).astype(np.int64)
    found = np.empty(len(held), dtype=np.int32)
    winding_at(
        raster.xs,
        raster.whole,
        raster.bits,
        raster.across,
        raster.start,
        raster.member,
        np.ascontiguousarray(where[held, 0]),
        asked,
        found,
    )
    turns[held] = found
    return turns


@dataclass(frozen=True, slots=True, eq=False)
class _Raster:
    """A mesh seen along x, sorted into square cells."""

    xs: NDArray[np.float64]
    whole: NDArray[np.int64]
    scale: float
    bits: int
    across: int
    start: NDArray[np.int64]
    member: NDArray[np.int32]


@lru_cache(maxsize=4)  # regions ask plane by plane
def _raster(mesh: TriangleMesh) -> _Raster:
    from voxelmat.kernels.winding import bin_by_column

    low, high = mesh.bounds
    scale = (2**_BITS - 1) / max(float((high - low)[1:].max()), 1e-300)
    whole = np.rint((mesh.triangles[:, :, 1:] - low[1:]) * scale).astype(np.int64)
    # About one triangle a cell on a smooth surface.
    fine = min(10, max(0, round(math.log2(len(mesh.faces)) / 2)))
    start, member = bin_by_column(whole, _BITS - fine, 2**fine)
    return _Raster(
        xs=np.ascontiguousarray(mesh.triangles[:, :, 0]),
        whole=whole,
        scale=scale,
        bits=_BITS - fine,
        across=2**fine,
        start=start,
        member=member,
    )


def contains(mesh: TriangleMesh, points: ArrayLike) -> NDArray[np.bool_]:
    """Whether each point lies inside a closed mesh (winding number above 0).

    Parameters and errors as for `winding_number`.

    Returns
    -------
    (n,) bool
    """
    inside: NDArray[np.bool_] = winding_number(mesh, points) > 0
    return inside

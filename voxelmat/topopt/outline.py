"""The outline of an optimised void: a level of the filtered density, never the voxels' faces."""

from __future__ import annotations

import itertools

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import distance_transform_edt
from scipy.spatial import cKDTree

__all__ = ["extend", "staircase_distance", "void_distance", "void_fill"]

Array = NDArray[np.float64]
Bools = NDArray[np.bool_]

_NEAREST = 4  # crossing points whose tangent planes are averaged
_PLANES_WITHIN = 2.0  # of the largest spacing; farther off the nearest point alone counts
_FLAT = 0.05  # of the steepest slope; a direction in a flatter field is noise
_SUB = 5  # sub-points an axis for the solid fraction of a cut voxel


def extend(field: Array, known: Bools, spacing: tuple[float, float, float]) -> Array:
    """Give every voxel outside `known` the value of the nearest known one.

    So a void's outline runs straight on through the shape's surface, where the shape cuts it.
    `spacing` is along x, y, z, mm; arrays are (nz, ny, nx).
    """
    nearest = distance_transform_edt(
        ~known, sampling=spacing[::-1], return_distances=False, return_indices=True
    )
    return np.asarray(field[tuple(nearest)])


def _crossings(phi: Array, slopes: list[Array], step: Array) -> tuple[Array, Array]:
    """Points where phi changes sign between neighbours, and unit normals there, both (n, 3)."""
    points, normals = [], []
    for axis in range(3):
        a = [slice(None)] * 3
        b = [slice(None)] * 3
        a[axis], b[axis] = slice(0, -1), slice(1, None)
        first, second = phi[tuple(a)], phi[tuple(b)]
        change = (first < 0) != (second < 0)
        at = np.argwhere(change)
        if not len(at):
            continue
        t = (first[change] / (first[change] - second[change]))[:, None]
        place = at.astype(float)
        place[:, axis] += t[:, 0]
        points.append(place * step)
        slope = np.column_stack(
            [(1 - t[:, 0]) * g[tuple(a)][change] + t[:, 0] * g[tuple(b)][change] for g in slopes]
        )
        own = np.zeros_like(slope)
        own[:, axis] = np.where(second[change] > first[change], 1.0, -1.0)
        normals.append(np.where((slope != 0).any(axis=1, keepdims=True), _unit(slope), own))
    if not points:
        return np.zeros((0, 3)), np.zeros((0, 3))
    return np.concatenate(points), np.concatenate(normals)


def _unit(vectors: Array) -> Array:
    """Scaled to length 1 along the last axis; zero stays zero."""
    length = np.linalg.norm(vectors, axis=-1, keepdims=True)
    return np.asarray(vectors / np.where(length > 0, length, 1.0))


def _slopes(phi: Array, step: Array) -> list[Array]:
    return [
        np.gradient(phi, step[a], axis=a) if phi.shape[a] > 1 else np.zeros_like(phi)
        for a in range(3)
    ]


def void_distance(
    density: Array, level: float, spacing: tuple[float, float, float], reach: float
) -> Array:
    """Signed distance to the surface ``density = level``, mm, negative where denser.

    Crossing points between voxel centres carry the surface with sub-voxel accuracy. Near it the
    distance is that to the tangent planes at the nearest points; farther off, that to the
    nearest point.

    Parameters
    ----------
    density : ndarray, (nz, ny, nx)
        Known everywhere (see `extend`).
    level : float
    spacing : tuple of float
        Along x, y, z, mm.
    reach : float
        Distances are cut at +-reach, mm.

    Returns
    -------
    ndarray, (nz, ny, nx)
    """
    step = np.array(spacing[::-1])
    phi = level - density
    sign = np.where(phi < 0, -1.0, 1.0)
    out = sign * reach
    slopes = _slopes(phi, step)
    points, normals = _crossings(phi, slopes, step)
    if not len(points):
        return out
    tree = cKDTree(points)
    centres = np.argwhere(np.ones(phi.shape, bool)) * step
    k = min(_NEAREST, len(points))
    answer = tree.query(centres, k=k, distance_upper_bound=reach)
    far, which = (np.asarray(a).reshape(-1, k) for a in answer)
    found = np.isfinite(far[:, 0])
    rows = np.flatnonzero(found)
    near = far[rows, 0]
    flat = out.reshape(-1)
    flat[rows] = sign.reshape(-1)[rows] * near
    close = rows[near < _PLANES_WITHIN * step.max()]
    some = np.minimum(which[close], len(points) - 1)
    offset = centres[close][:, None, :] - points[some]
    # The mean of the normal there and the normal here: on a round surface the tangent plane at
    # the point alone would be off by the sagitta, always to the same side.
    here = np.column_stack([g.reshape(-1)[close] for g in slopes])
    size = np.linalg.norm(here, axis=1, keepdims=True)
    here = np.where(size > _FLAT * size.max(initial=0.0), _unit(here), 0.0)
    alike = np.einsum("nkd,nd->nk", normals[some], here) > 0.5
    normal = _unit(normals[some] + np.where(alike[..., None], here[:, None, :], 0.0))
    plane = np.einsum("nkd,nkd->nk", offset, normal)
    weight = np.where(np.isfinite(far[close]), 1.0 / (far[close] ** 2 + 1e-6 * step.min() ** 2), 0)
    mean = (plane * weight).sum(1) / weight.sum(1)
    # A tangent plane far from its own point can lie on the wrong side; the sign of phi is sure.
    flat[close] = np.where(np.sign(mean) == sign.reshape(-1)[close], mean, 0.0)
    return np.clip(out, -reach, reach)


def void_fill(distance: Array, density: Array, spacing: tuple[float, float, float]) -> Array:
    """Solid fraction of each voxel, 0 to 1, with the surface as a plane across a cut voxel.

    Parameters
    ----------
    distance, density : ndarray, (nz, ny, nx)
        Of `void_distance`; and what it was made of, for the direction of the plane.
    spacing : tuple of float
        mm, along x, y, z.
    """
    step = np.array(spacing[::-1])
    out = np.where(distance < 0, 1.0, 0.0)
    cut = np.abs(distance) < 0.5 * np.linalg.norm(step)
    slope = np.column_stack([-g[cut] for g in _slopes(density, step)])
    normal = _unit(slope)
    middle = (np.arange(_SUB) + 0.5) / _SUB - 0.5
    solid = np.zeros(len(normal))
    for offset in itertools.product(middle, repeat=3):
        solid += distance[cut] + normal @ (np.array(offset) * step) < 0
    out[cut] = solid / _SUB**3
    return out


def staircase_distance(solid: Bools, spacing: tuple[float, float, float], reach: float) -> Array:
    """Signed distance, mm, to the faces of the solid voxels: for a part without a true one.

    Exact for a box; beyond the grid everything is empty. `solid` is (nz, ny, nx).
    """
    step = np.array(spacing[::-1])
    padded = np.pad(solid, 1)
    here = np.indices(padded.shape)
    out = np.zeros(padded.shape)
    for inside in (True, False):
        side = padded == inside
        if not side.any() or side.all():
            out[side] = -reach if inside else reach
            continue
        nearest = distance_transform_edt(
            side, sampling=tuple(step), return_distances=False, return_indices=True
        )
        square = np.zeros(padded.shape)
        for a in range(3):
            gap = np.maximum(np.abs(here[a] - nearest[a]) - 0.5, 0.0) * step[a]
            square += gap**2
        out[side] = (-1.0 if inside else 1.0) * np.sqrt(square[side])
    return np.clip(out[1:-1, 1:-1, 1:-1], -reach, reach)

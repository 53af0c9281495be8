"""A face of a mesh grown to its neighbours up to an angle, and found again on another mesh."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.mesh import TriangleMesh
from voxelmat.model.surface import Faces
from voxelmat.shape.pointdistance import distance_to_triangles

__all__ = ["Grown", "grow"]

Doubles = NDArray[np.float64]
#: How far a seed may lie off the mesh, as a share of the size of its box; ours.
_OFF = 0.02
#: Voxel faces within so many edges of the mesh belong to its surface.
_NEAR = 1.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Grown:
    """Triangles that hang together without a bend beyond an angle.

    Attributes
    ----------
    mesh : TriangleMesh
    chosen : ndarray of bool, shape (faces,)
    area_mm2 : float
    """

    mesh: TriangleMesh
    chosen: NDArray[np.bool_]
    area_mm2: float

    def holds(self, faces: Faces, spacing: tuple[float, float, float]) -> NDArray[np.bool_]:
        """Which voxel faces lie on it: near the mesh, and nearer to these triangles than to others.

        Parameters
        ----------
        faces : Faces
        spacing : tuple of float
            mm.
        """
        corners = np.array(self.mesh.triangles)
        own = distance_to_triangles(corners[self.chosen], faces.centre)
        near = own <= _NEAR * max(spacing)
        if self.chosen.all():
            return np.asarray(near)
        other = distance_to_triangles(corners[~self.chosen], faces.centre)
        return np.asarray(near & (own <= other))


def _normals(mesh: TriangleMesh) -> tuple[Doubles, Doubles]:
    """Unit normals and areas; a triangle without an area has the normal 0."""
    corners = np.array(mesh.triangles)
    cross = np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0])
    length = np.linalg.norm(cross, axis=1)
    return cross / np.maximum(length, 1e-300)[:, None], 0.5 * length


def _nearest(mesh: TriangleMesh, point: Doubles) -> tuple[int, float]:
    """The triangle nearest to a point, and how far it is, mm."""
    corners = np.array(mesh.triangles)
    a, u, v = corners[:, 0], corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0]
    best = np.full(len(corners), np.inf)
    # Within the triangle's own plane, then along its three edges.
    uu, uv, vv = (np.einsum("ij,ij->i", p, q) for p, q in ((u, u), (u, v), (v, v)))
    pu, pv = (np.einsum("ij,ij->i", point - a, q) for q in (u, v))
    det = np.maximum(uu * vv - uv * uv, 1e-300)
    s, t = (vv * pu - uv * pv) / det, (uu * pv - uv * pu) / det
    inside = (s >= 0) & (t >= 0) & (s + t <= 1)
    foot = a + s[:, None] * u + t[:, None] * v
    best[inside] = np.linalg.norm(foot - point, axis=1)[inside]
    for start, end in ((0, 1), (1, 2), (2, 0)):
        p, d = corners[:, start], corners[:, end] - corners[:, start]
        size = np.maximum(np.einsum("ij,ij->i", d, d), 1e-300)
        w = np.clip(np.einsum("ij,ij->i", point - p, d) / size, 0.0, 1.0)
        best = np.minimum(best, np.linalg.norm(p + w[:, None] * d - point, axis=1))
    at = int(best.argmin())
    return at, float(best[at])


def grow(mesh: TriangleMesh, seed_mm: tuple[float, float, float], angle_deg: float) -> Grown:
    """Grow from the triangle at a point across every edge that bends by at most an angle.

    Parameters
    ----------
    mesh : TriangleMesh
    seed_mm : tuple of float
        On the surface; the nearest triangle is taken.
    angle_deg : float
        0 to 180, between the normals of two triangles that share an edge.

    Raises
    ------
    InputError
        If the seed does not lie on the mesh, or the angle is out of range.
    """
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    if not 0 <= angle_deg <= 180:
        raise InputError(f"The angle lies between 0 and 180 degrees; got {angle_deg}.")
    at, off = _nearest(mesh, np.asarray(seed_mm, dtype=float))
    size = float(np.linalg.norm(np.ptp(mesh.vertices, axis=0)))
    if not off <= _OFF * size:
        raise InputError(
            f"There is no surface of '{mesh.name}' at {_words(seed_mm)} mm: the nearest is "
            f"{off:.3g} mm away. Choose the face again."
        )
    normal, area = _normals(mesh)
    # Files often repeat a corner for each triangle: the same place is the same corner.
    _, corner = np.unique(mesh.vertices, axis=0, return_inverse=True)
    faces = corner.reshape(-1)[mesh.faces]
    edges = np.sort(faces[:, [[0, 1], [1, 2], [2, 0]]].reshape(-1, 2), axis=1)
    owner = np.repeat(np.arange(len(faces)), 3)
    order = np.lexsort((edges[:, 1], edges[:, 0]))
    edges, owner = edges[order], owner[order]
    same = (edges[1:] == edges[:-1]).all(axis=1)
    first, second = owner[:-1][same], owner[1:][same]
    bend = np.einsum("ij,ij->i", normal[first], normal[second])
    flat = bend >= np.cos(np.radians(angle_deg)) - 1e-9
    flat |= (area[first] == 0) | (area[second] == 0)
    link = coo_array(
        (np.ones(int(flat.sum())), (first[flat], second[flat])), shape=(len(faces), len(faces))
    )
    _, piece = connected_components(link, directed=False)
    chosen = np.asarray(piece == piece[at])
    return Grown(mesh=mesh, chosen=chosen, area_mm2=float(area[chosen].sum()))


def _words(point: tuple[float, float, float]) -> str:
    return ", ".join(f"{p:.4g}" for p in point)

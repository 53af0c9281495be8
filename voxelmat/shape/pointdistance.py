"""True signed distance from single points to a mesh, or to what several bodies leave solid."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.mesh import TriangleMesh
from voxelmat.shape.bodies import Body
from voxelmat.shape.inside import contains
from voxelmat.shape.tree import LEAF, disc_tree

__all__ = ["distance_to_bodies", "distance_to_mesh", "distance_to_triangles"]


def distance_to_mesh(mesh: TriangleMesh, points: NDArray[np.float64]) -> NDArray[np.float64]:
    """Signed distance of points to a closed mesh, negative inside, mm.

    Parameters
    ----------
    mesh : TriangleMesh
    points : ndarray of float64, shape (n, 3)
        mm.

    Raises
    ------
    InputError
        If the mesh has no face with an area.
    """
    corners = np.array(mesh.triangles)
    out = distance_to_triangles(corners, points, what=f"Mesh '{mesh.name}'")
    return np.where(contains(mesh, points), -out, out)


def distance_to_triangles(
    corners: NDArray[np.float64], points: NDArray[np.float64], *, what: str = "The surface"
) -> NDArray[np.float64]:
    """Distance of points to a set of triangles, open or closed, mm.

    Parameters
    ----------
    corners : ndarray of float64, shape (m, 3, 3)
    points : ndarray of float64, shape (n, 3)
    what : str
        Begins the error's sentence.

    Raises
    ------
    InputError
        If no triangle has an area.
    """
    from voxelmat.kernels.pointdistance import point_distances

    edges = corners[:, 1:] - corners[:, :1]
    wide = np.linalg.norm(np.cross(edges[:, 0], edges[:, 1]), axis=1) > 0
    if not wide.any():
        raise InputError(f"{what} has no face with an area. Export it again.")
    corners, edges = corners[wide], edges[wide]
    tree = disc_tree(corners)
    u, v = edges[tree.order].transpose(1, 0, 2)
    products = [np.einsum("ij,ij->i", a, b) for a, b in ((u, u), (u, v), (v, v))]
    triangles = np.concatenate([corners[tree.order, 0], u, v, np.stack(products, axis=1)], axis=1)
    out = np.empty(len(points))
    point_distances(tree.nodes, triangles, LEAF, np.ascontiguousarray(points, dtype=float), out)
    return out


def distance_to_bodies(bodies: Sequence[Body], points: NDArray[np.float64]) -> NDArray[np.float64]:
    """Signed distance to what is printed: all bodies together, bought-in ones cut away, mm.

    Inside an overlap or beside an interface the size is a lower bound; at the outline it is exact.
    """
    found = np.full(len(points), np.inf)
    for body in bodies:
        if not body.bought_in:
            found = np.minimum(found, distance_to_mesh(body.mesh, points))
    for body in bodies:
        if body.bought_in:
            found = np.maximum(found, body.clearance_mm - distance_to_mesh(body.mesh, points))
    return found

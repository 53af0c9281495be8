"""Slow NumPy twins of the mesh kernels, by other formulas than the kernels use."""

from __future__ import annotations

import itertools

import numpy as np
from scipy.spatial import ConvexHull, HalfspaceIntersection, QhullError


def solid_angle_winding(triangles, points):
    """Winding number as the sum of solid angles over 4 pi.

    van Oosterom & Strackee 1983, IEEE Trans. Biomed. Eng. 30:125-126.
    """
    a, b, c = (triangles[None, :, n] - points[:, None] for n in range(3))
    la, lb, lc = (np.linalg.norm(v, axis=2) for v in (a, b, c))
    top = np.einsum("ptc,ptc->pt", a, np.cross(b, c))
    bottom = (
        la * lb * lc
        + np.einsum("ptc,ptc->pt", a, b) * lc
        + np.einsum("ptc,ptc->pt", b, c) * la
        + np.einsum("ptc,ptc->pt", c, a) * lb
    )
    return (2 * np.arctan2(top, bottom)).sum(axis=1) / (4 * np.pi)


def distance_to_triangles(triangles, points):
    """Least distance from each point: to a plane where its foot is inside, else to an edge."""
    best = np.full(len(points), np.inf)
    for tri in triangles:
        for p, q in itertools.pairwise([*tri, tri[0]]):
            along = np.clip((points - p) @ (q - p) / ((q - p) @ (q - p)), 0, 1)
            best = np.minimum(best, np.linalg.norm(points - p - along[:, None] * (q - p), axis=1))
        normal = np.cross(tri[1] - tri[0], tri[2] - tri[0])
        normal = normal / np.linalg.norm(normal)
        height = (points - tri[0]) @ normal
        foot = points - height[:, None] * normal
        within = np.ones(len(points), dtype=bool)
        for p, q in itertools.pairwise([*tri, tri[0]]):
            within &= np.cross(q - p, foot - p) @ normal >= 0
        best = np.where(within, np.minimum(best, np.abs(height)), best)
    return best


def convex_fraction(mesh, grid):
    """Exact solid fraction of each voxel for a convex mesh, by intersecting half-spaces."""
    normal = np.cross(
        mesh.triangles[:, 1] - mesh.triangles[:, 0], mesh.triangles[:, 2] - mesh.triangles[:, 0]
    )
    normal /= np.linalg.norm(normal, axis=1, keepdims=True)
    offset = -np.einsum("ij,ij->i", normal, mesh.triangles[:, 0])
    faces = np.column_stack([normal, offset])
    fraction = np.zeros(grid.shape)
    h = np.array(grid.spacing)
    for index in np.ndindex(*grid.shape):
        low = np.array(grid.origin) + np.array(index) * h
        corners = low + h * np.array(list(itertools.product((0, 1), repeat=3)))
        height = corners @ normal.T + offset
        if (height.min(axis=0) >= 0).any():
            continue
        if (height <= 0).all():
            fraction[index] = 1
            continue
        walls = [[*(-np.eye(3)[a]), low[a]] for a in range(3)]
        walls += [[*np.eye(3)[a], -(low[a] + h[a])] for a in range(3)]
        planes = np.vstack([faces, walls])
        middle, room = _deepest(planes)
        if room < 1e-7:
            continue
        try:
            points = HalfspaceIntersection(planes, middle).intersections
            fraction[index] = ConvexHull(points).volume / h.prod()
        except QhullError:
            continue
    return fraction


def _deepest(planes):
    """The point farthest inside all half-spaces, and how far that is."""
    from scipy.optimize import linprog

    found = linprog(
        [0, 0, 0, -1],
        A_ub=np.column_stack([planes[:, :3], np.ones(len(planes))]),
        b_ub=-planes[:, 3],
        bounds=[(None, None)] * 3 + [(0, None)],
    )
    return (found.x[:3], found.x[3]) if found.status == 0 else (None, 0.0)


def crossing_twin(vertices, faces):
    """Pairs of triangles without a common corner of which an edge pierces the other."""
    pairs = set()
    for f, g in itertools.combinations(range(len(faces)), 2):
        if set(faces[f]) & set(faces[g]):
            continue
        if any(_pierces(vertices[faces[a]], vertices[faces[b]]) for a, b in ((f, g), (g, f))):
            pairs.add((f, g))
    return pairs


def _pierces(one, two):
    for p, q in itertools.pairwise([*one, one[0]]):
        system = np.column_stack([q - p, two[0] - two[1], two[0] - two[2]])
        if abs(np.linalg.det(system)) < 1e-12:
            continue
        t, u, v = np.linalg.solve(system, two[0] - p)
        if 0 < t < 1 and u > 0 and v > 0 and u + v < 1:
            return True
    return False

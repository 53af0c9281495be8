"""Closed primitive meshes: box, cylinder, tube, ball and bodies of revolution."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.mesh import TriangleMesh

__all__ = ["box", "cylinder", "icosphere", "revolve", "tube"]

Point = Sequence[float]


def _positive(value: float, what: str) -> float:
    if not (math.isfinite(value) and value > 0):
        raise InputError(f"{what} must be a positive length in mm; got {value}.")
    return float(value)


def box(size: Point, low: Point = (0.0, 0.0, 0.0), *, name: str = "box") -> TriangleMesh:
    """A block of edges `size` whose low corner is `low`, mm; twelve triangles."""
    edges = np.array([_positive(float(s), "A box edge") for s in size])
    corner = np.array([[c & 1, c >> 1 & 1, c >> 2] for c in range(8)], dtype=float)
    quads = [(0, 2, 3, 1), (4, 5, 7, 6), (0, 1, 5, 4), (2, 6, 7, 3), (0, 4, 6, 2), (1, 3, 7, 5)]
    faces = [f for a, b, c, d in quads for f in ((a, b, c), (a, c, d))]
    vertices = np.asarray(low, dtype=float) + corner * edges
    return TriangleMesh(vertices=vertices, faces=np.array(faces, dtype=np.int32), name=name)


def icosphere(
    subdivisions: int = 3,
    radius: float = 1.0,
    centre: Point = (0.0, 0.0, 0.0),
    *,
    name: str = "sphere",
) -> TriangleMesh:
    """A ball of 20 * 4**subdivisions triangles, its corners on the sphere."""
    if not 0 <= subdivisions <= 8:
        raise InputError(f"An icosphere takes 0 to 8 subdivisions; got {subdivisions}.")
    g = (1 + math.sqrt(5)) / 2
    base = [(s * 1.0, t * g, 0.0) for s in (-1, 1) for t in (-1, 1)]
    vertices = np.array([np.roll(p, turn) for turn in range(3) for p in base])
    # The 20 faces of the icosahedron are the triples of corners that are all 2 apart.
    near = np.abs(np.linalg.norm(vertices[:, None] - vertices[None], axis=2) - 2) < 1e-9
    faces = np.array(
        [
            (a, b, c)
            for a in range(12)
            for b in range(a + 1, 12)
            for c in range(b + 1, 12)
            if near[a, b] and near[b, c] and near[a, c]
        ]
    )
    a, b, c = vertices[faces].transpose(1, 0, 2)
    inward = np.einsum("ij,ij->i", np.cross(b - a, c - a), a) < 0
    faces[inward] = faces[inward][:, ::-1]
    vertices = vertices / np.linalg.norm(vertices, axis=1, keepdims=True)
    for _ in range(subdivisions):
        vertices, faces = _quartered(vertices, faces)
        vertices /= np.linalg.norm(vertices, axis=1, keepdims=True)
    placed = np.asarray(centre, dtype=float) + _positive(radius, "A radius") * vertices
    return TriangleMesh(vertices=placed, faces=faces.astype(np.int32), name=name)


def _quartered(
    vertices: NDArray[np.float64], faces: NDArray[np.int_]
) -> tuple[NDArray[np.float64], NDArray[np.int_]]:
    """Every triangle cut in four at the middles of its edges."""
    ends = np.sort(np.concatenate([faces[:, [0, 1]], faces[:, [1, 2]], faces[:, [2, 0]]]), axis=1)
    edges, which = np.unique(ends, axis=0, return_inverse=True)
    ab, bc, ca = which.reshape(3, -1) + len(vertices)
    a, b, c = faces.T
    parts = [(a, ab, ca), (ab, b, bc), (ca, bc, c), (ab, bc, ca)]
    cut = np.concatenate([np.stack(part, axis=1) for part in parts])
    return np.concatenate([vertices, vertices[edges].mean(axis=1)]), cut


def revolve(
    profile: Sequence[Point], segments: int = 64, *, name: str = "revolved"
) -> TriangleMesh:
    """Turn a profile round the z axis into a closed body.

    Parameters
    ----------
    profile : sequence of (radius, z)
        Open polyline, mm, from the lower to the upper end of the body. Ends
        with radius above 0 are closed by a flat cap.
    segments : int
        Flat sides round the axis, at least 3.
    name : str
        Name of the mesh.

    Raises
    ------
    InputError
        If the profile has too few points, a negative radius, or touches the
        axis between its ends (the body would fall into two).
    """
    points = np.asarray(profile, dtype=np.float64)
    if points.ndim != 2 or points.shape[1:] != (2,) or len(points) < 2 or segments < 3:
        raise InputError(
            "A profile takes at least two (radius, z) points and three segments; got "
            f"{len(points)} points and {segments} segments."
        )
    if not np.isfinite(points).all() or (points[:, 0] < 0).any() or (points[1:-1, 0] == 0).any():
        raise InputError("A profile's radii are above 0 mm, and 0 at its two ends only.")
    if points[0, 0] > 0:
        points = np.vstack([(0.0, points[0, 1]), points])
    if points[-1, 0] > 0:
        points = np.vstack([points, (0.0, points[-1, 1])])
    rings = len(points) - 2
    if rings < 1:
        raise InputError("A profile needs at least one point off the axis.")
    turn = 2 * np.pi * np.arange(segments) / segments
    r, z = points[1:-1, :1], points[1:-1, 1:]
    ring = np.stack([r * np.cos(turn), r * np.sin(turn), z + 0 * turn], axis=2).reshape(-1, 3)
    poles = [(0.0, 0.0, points[0, 1]), (0.0, 0.0, points[-1, 1])]
    here = np.arange(segments)
    on = (here + 1) % segments
    bottom, top = rings * segments, rings * segments + 1
    faces = [np.stack([np.full(segments, bottom), on, here], axis=1)]
    for i in range(rings - 1):
        a, b = i * segments + here, i * segments + on
        c, d = b + segments, a + segments
        faces += [np.stack([a, b, c], axis=1), np.stack([a, c, d], axis=1)]
    last = (rings - 1) * segments
    faces.append(np.stack([last + here, last + on, np.full(segments, top)], axis=1))
    mesh = TriangleMesh(
        vertices=np.vstack([ring, poles]),
        faces=np.concatenate(faces).astype(np.int32),
        name=name,
    )
    if mesh.volume <= 0:
        raise InputError("The profile encloses no volume; give its points from low z to high z.")
    return mesh


def cylinder(
    radius: float, low_z: float, high_z: float, segments: int = 64, *, name: str = "cylinder"
) -> TriangleMesh:
    """A cylinder round the z axis between two heights, mm."""
    r = _positive(radius, "A radius")
    return revolve([(r, low_z), (r, high_z)], segments, name=name)


def tube(
    inner: float,
    outer: float,
    low_z: float,
    high_z: float,
    segments: int = 64,
    *,
    name: str = "tube",
) -> TriangleMesh:
    """A pipe round the z axis between two heights, mm."""
    if not 0 < inner < outer or not low_z < high_z:
        raise InputError(
            f"A tube needs 0 < inner < outer and low_z < high_z; got inner {inner}, outer "
            f"{outer}, z {low_z} to {high_z} mm."
        )
    loop = [(inner, high_z), (inner, low_z), (outer, low_z), (outer, high_z)]
    turn = 2 * np.pi * np.arange(segments) / segments
    vertices = np.concatenate(
        [np.stack([r * np.cos(turn), r * np.sin(turn), z + 0 * turn], axis=1) for r, z in loop]
    )
    here = np.arange(segments)
    on = (here + 1) % segments
    faces = []
    for i in range(4):
        a, b = i * segments + here, i * segments + on
        d, c = (i + 1) % 4 * segments + here, (i + 1) % 4 * segments + on
        faces += [np.stack([a, b, c], axis=1), np.stack([a, c, d], axis=1)]
    return TriangleMesh(vertices=vertices, faces=np.concatenate(faces).astype(np.int32), name=name)

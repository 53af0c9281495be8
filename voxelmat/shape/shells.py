"""Edges and shells of a mesh: what is joined to what, what is closed, what is a cavity."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from voxelmat.model.mesh import TriangleMesh
from voxelmat.shape.inside import contains

__all__ = ["Edges", "boxes_meet", "edges_of", "part_of", "shells_of", "with_cavities"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Edges:
    """The distinct edges of a mesh.

    Attributes
    ----------
    ends : (e, 2) int64
        Vertex numbers, the lower first.
    uses : (e,) int64
        Faces at each edge.
    turn : (e,) int64
        Faces that run it upwards less those that run it downwards; 0 when closed.
    of_face : (m, 3) int64
        Edge number of each side of each face (corner 0-1, 1-2, 2-0).
    upwards : (m, 3) bool
        Whether the face runs that edge from the lower to the higher vertex.
    """

    ends: NDArray[np.int64]
    uses: NDArray[np.int64]
    turn: NDArray[np.int64]
    of_face: NDArray[np.int64]
    upwards: NDArray[np.bool_]


def edges_of(faces: NDArray[np.int32]) -> Edges:
    """Collect the edges of (m, 3) faces."""
    run = faces[:, [0, 1, 1, 2, 2, 0]].reshape(-1, 2).astype(np.int64)
    upwards = run[:, 0] < run[:, 1]
    run.sort(axis=1)
    span = int(run.max()) + 1 if run.size else 1
    key, which = np.unique(run[:, 0] * span + run[:, 1], return_inverse=True)
    which = which.reshape(-1)
    up = np.bincount(which[upwards], minlength=len(key))
    uses = np.bincount(which, minlength=len(key))
    ends = np.stack([key // span, key % span], axis=1)
    # The side of a collapsed face from a corner to itself bounds nothing.
    point = ends[:, 0] == ends[:, 1]
    return Edges(
        ends=ends,
        uses=np.where(point, 2, uses),
        turn=np.where(point, 0, 2 * up - uses),
        of_face=which.reshape(-1, 3),
        upwards=upwards.reshape(-1, 3),
    )


def shells_of(mesh: TriangleMesh, edges: Edges | None = None) -> list[NDArray[np.int64]]:
    """Face numbers of each set of faces that hang together by edges, largest first.

    `edges` saves time where they are known.
    """
    edges = edges_of(mesh.faces) if edges is None else edges
    m = len(mesh.faces)
    if not m:
        return []
    side = edges.of_face.ravel()
    face = np.repeat(np.arange(m), 3)
    order = np.argsort(side, kind="stable")
    same = side[order][1:] == side[order][:-1]
    a, b = face[order][:-1][same], face[order][1:][same]
    links = coo_array((np.ones(len(a), dtype=np.int8), (a, b)), shape=(m, m))
    _, label = connected_components(links, directed=False)
    order = np.argsort(label, kind="stable")
    parts = np.split(order, np.flatnonzero(np.diff(label[order])) + 1)
    return sorted(parts, key=lambda faces: (-len(faces), int(faces[0])))


def part_of(mesh: TriangleMesh, faces: NDArray[np.int64]) -> TriangleMesh:
    """The mesh of some faces only, without vertices that they do not use."""
    kept, renumbered = np.unique(mesh.faces[faces], return_inverse=True)
    return TriangleMesh(
        vertices=mesh.vertices[kept],
        faces=renumbered.reshape(-1, 3).astype(np.int32),
        name=mesh.name,
        source=mesh.source,
        source_digest=mesh.source_digest,
        cautions=mesh.cautions,
    )


def with_cavities(mesh: TriangleMesh, numbers: list[NDArray[np.int64]]) -> list[TriangleMesh]:
    """Split a closed mesh into bodies: each outer shell with the cavities inside it.

    Parameters
    ----------
    mesh : TriangleMesh
    numbers : list of arrays
        Its shells, from `shells_of`.
    """
    shells = [part_of(mesh, faces) for faces in numbers]
    outer = sorted((s for s in shells if s.volume > 0), key=lambda s: s.volume)
    groups = [[shell] for shell in outer]
    for cavity in (s for s in shells if s.volume < 0):
        for group in groups:
            # The smallest shell that holds a corner of the cavity is its parent.
            if contains(group[0], cavity.vertices[:1])[0]:
                group.append(cavity)
                break
    return [_together(group) for group in groups]


def boxes_meet(meshes: list[TriangleMesh]) -> bool:
    """Whether the bounding boxes of any two meshes touch or overlap."""
    low = np.array([m.bounds[0] for m in meshes])
    high = np.array([m.bounds[1] for m in meshes])
    for n in range(len(meshes) - 1):
        if ((low[n + 1 :] <= high[n]) & (high[n + 1 :] >= low[n])).all(axis=1).any():
            return True
    return False


def _together(group: list[TriangleMesh]) -> TriangleMesh:
    offsets = np.cumsum([0, *(len(m.vertices) for m in group)])
    return TriangleMesh(
        vertices=np.concatenate([m.vertices for m in group]),
        faces=np.concatenate([m.faces + int(o) for m, o in zip(group, offsets[:-1], strict=True)]),
        name=group[0].name,
        source=group[0].source,
        source_digest=group[0].source_digest,
    )

"""Flat holes of few edges, filled by triangles round their middle."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from voxelmat.model.mesh import TriangleMesh
from voxelmat.shape.shells import edges_of
from voxelmat.shape.words import place_text

__all__ = ["fill_small_holes"]

#: A hole is flat when no corner stands off its plane by more than this part of its width.
_FLATNESS = 0.02


def fill_small_holes(mesh: TriangleMesh, max_edges: int) -> tuple[TriangleMesh, str]:
    """Fill each flat hole of at most `max_edges` edges whose middle sees its whole rim.

    Returns
    -------
    mesh : TriangleMesh
    report : str
        What was filled and where; empty if nothing was.
    """
    vertices, faces = [mesh.vertices], [mesh.faces]
    count = len(mesh.vertices)
    told = []
    for rim in _rims(mesh):
        if len(rim) > max_edges:
            continue
        corners = mesh.vertices[rim]
        middle = corners.mean(axis=0)
        if not _flat_and_seen(corners, middle):
            continue
        vertices.append(middle[None])
        following = np.roll(rim, -1)
        faces.append(np.stack([rim, following, np.full(len(rim), count)], axis=1).astype(np.int32))
        count += 1
        told.append(f"a hole of {len(rim)} edges at {place_text(middle)}")
    if not told:
        return mesh, ""
    filled = replace(mesh, vertices=np.concatenate(vertices), faces=np.concatenate(faces))
    return filled, f"Filled flat: {'; '.join(told)}."


def _rims(mesh: TriangleMesh) -> list[NDArray[np.int64]]:
    """Closed loops of open edges, run against the faces beside them."""
    edges = edges_of(mesh.faces)
    open_side = edges.uses[edges.of_face] == 1
    tail = mesh.faces[open_side]
    head = np.roll(mesh.faces, -1, axis=1)[open_side]
    follow: dict[int, int] = {}
    forked: set[int] = set()
    for a, b in zip(head.tolist(), tail.tolist(), strict=True):
        if a in follow:
            forked.add(a)  # two holes meet in a corner: which is which is a guess
        follow[a] = b
    rims = []
    while follow:
        start, at = follow.popitem()
        rim = [start]
        while at != start and at in follow:
            rim.append(at)
            at = follow.pop(at)
        if at == start and len(rim) > 2 and not forked.intersection(rim):
            rims.append(np.array(rim))
    return sorted(rims, key=lambda rim: int(rim.min()))


def _flat_and_seen(corners: NDArray[np.float64], middle: NDArray[np.float64]) -> bool:
    spokes = corners - middle
    across = np.cross(spokes, np.roll(spokes, -1, axis=0))
    total = across.sum(axis=0)
    length = float(np.linalg.norm(total))
    if length == 0:
        return False
    normal = total / length
    width = float(np.ptp(corners, axis=0).max())
    flat = float(np.abs(spokes @ normal).max()) <= _FLATNESS * width
    return flat and bool((across @ normal > 0).all())

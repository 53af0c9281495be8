"""Safe repairs of a mesh, each told in words: weld, drop, turn round, fill."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components
from scipy.spatial import cKDTree

from voxelmat.errors import InputError
from voxelmat.model.mesh import TriangleMesh
from voxelmat.shape.defects import (
    degenerate_faces,
    duplicate_faces,
    is_cavity,
    require_sound,
)
from voxelmat.shape.holes import fill_small_holes
from voxelmat.shape.shells import edges_of, part_of, shells_of
from voxelmat.units import number

__all__ = ["mend"]

#: Corners nearer than this, relative to the largest edge of the box, become one.
WELD = 1e-6


def mend(
    mesh: TriangleMesh,
    *,
    repair: bool = True,
    fill_holes: bool = False,
    max_hole_edges: int = 16,
) -> tuple[TriangleMesh, tuple[str, ...]]:
    """Make a mesh fit to be voxelised, or say why it is not.

    Parameters
    ----------
    mesh : TriangleMesh
    repair : bool
        Allow what changes no shape: weld corners that coincide, drop faces without area and
        faces that stand there twice, make the winding agree, turn an inside-out shell. When
        False the mesh is only checked.
    fill_holes : bool
        Allow filling flat holes, which adds surface that nobody drew.
    max_hole_edges : int
        Largest hole that may be filled.

    Returns
    -------
    mesh : TriangleMesh
        The same object if nothing was done.
    report : tuple of str
        Each repair and each harmless oddity, in words.

    Raises
    ------
    InputError
        If a defect is left that keeps the mesh from being voxelised; it says where.
    """
    if not len(mesh.faces):
        raise InputError(f"Mesh '{mesh.name}' has no faces. Export it as a triangle mesh.")
    done: list[str] = []
    if repair:
        steps: list[Callable[[TriangleMesh], tuple[TriangleMesh, str]]] = [
            _weld,
            _drop,
            _agree,
        ]
        if fill_holes:
            steps.append(lambda m: fill_small_holes(m, max_hole_edges))
        steps.append(_outwards)
        for step in steps:
            mesh, words = step(mesh)
            if words:
                done.append(words)
    left = require_sound(mesh)
    return mesh, (*done, *left)


def _weld(mesh: TriangleMesh) -> tuple[TriangleMesh, str]:
    """Merge corners closer than the tolerance, but only where an edge is open."""
    edges = edges_of(mesh.faces)
    loose = np.unique(edges.ends[edges.uses == 1])
    if not loose.size:
        return mesh, ""
    reach = WELD * float(mesh.size.max())
    pairs = cKDTree(mesh.vertices[loose]).query_pairs(reach, output_type="ndarray")
    if not len(pairs):
        return mesh, ""
    n = len(mesh.vertices)
    a, b = loose[pairs].T
    links = coo_array((np.ones(len(a), dtype=np.int8), (a, b)), shape=(n, n))
    groups, label = connected_components(links, directed=False)
    first = np.full(groups, n, dtype=np.int64)
    np.minimum.at(first, label, np.arange(n))
    faces = first[label][mesh.faces].astype(np.int32)
    words = f"{n - groups} corners within {number(reach, 2)} mm of another were welded to it."
    return replace(mesh, faces=faces), words


def _drop(mesh: TriangleMesh) -> tuple[TriangleMesh, str]:
    """Drop faces with a repeated corner, and repeats of faces."""
    f = mesh.faces
    collapsed = (f[:, 0] == f[:, 1]) | (f[:, 1] == f[:, 2]) | (f[:, 2] == f[:, 0])
    twins = duplicate_faces(mesh)
    # A sliver with three different corners stays: without it the surface would be open.
    gone = np.union1d(np.intersect1d(np.flatnonzero(collapsed), degenerate_faces(mesh)), twins)
    if not gone.size:
        return mesh, ""
    kept = np.setdiff1d(np.arange(len(f)), gone)
    if not kept.size:
        raise InputError(f"Mesh '{mesh.name}' has no face with an area. Export it again.")
    words = f"{gone.size} faces without area or standing there twice were dropped."
    return part_of(mesh, kept), words


def _agree(mesh: TriangleMesh) -> tuple[TriangleMesh, str]:
    """Turn faces round until neighbours agree, the fewest in each shell."""
    edges = edges_of(mesh.faces)
    if not ((edges.uses == 2) & (edges.turn != 0)).any():
        return mesh, ""
    side = edges.of_face.ravel()
    face = np.repeat(np.arange(len(mesh.faces)), 3)
    up = edges.upwards.ravel()
    order = np.argsort(side, kind="stable")
    paired = np.flatnonzero((edges.uses[side[order][:-1]] == 2) & (np.diff(side[order]) == 0))
    a, b = face[order][paired], face[order][paired + 1]
    differ = up[order][paired] == up[order][paired + 1]
    flip, shell = _two_colours(len(mesh.faces), a, b, differ)
    if flip is None:
        return mesh, ""  # a one-sided surface; the check that follows says so
    turned = np.bincount(shell, weights=flip)
    size = np.bincount(shell)
    flip ^= (turned > size / 2)[shell]
    faces = mesh.faces.copy()
    faces[flip] = faces[flip][:, ::-1]
    words = f"{int(flip.sum())} faces were turned round so that all agree which side is outside."
    return replace(mesh, faces=faces), words


def _two_colours(
    m: int, a: NDArray[np.int64], b: NDArray[np.int64], differ: NDArray[np.bool_]
) -> tuple[NDArray[np.bool_] | None, NDArray[np.int32]]:
    """Which faces to turn, by the double cover: node f is 'kept', node f + m is 'turned'.

    Neighbours that agree join kept with kept; those that differ join kept with turned. A
    face that hangs together with its own turned copy has only one side.
    """
    one = np.concatenate([a, a + m])
    two = np.concatenate([np.where(differ, b + m, b), np.where(differ, b, b + m)])
    cover = coo_array((np.ones(len(one), dtype=np.int8), (one, two)), shape=(2 * m, 2 * m))
    _, label = connected_components(cover, directed=False)
    if (label[:m] == label[m:]).any():
        return None, label[:m]
    links = coo_array((np.ones(len(a), dtype=np.int8), (a, b)), shape=(m, m))
    shells, shell = connected_components(links, directed=False)
    base = np.full(shells, -1, dtype=np.int64)
    base[shell[::-1]] = label[:m][::-1]
    return label[:m] != base[shell], shell


def _outwards(mesh: TriangleMesh) -> tuple[TriangleMesh, str]:
    """Turn closed shells that are inside out, unless they are cavities."""
    if edges_of(mesh.faces).turn.any():
        return mesh, ""
    told = []
    if mesh.volume < 0:
        # Everything at once, so that cavities stay cavities.
        mesh = replace(mesh, faces=mesh.faces[:, ::-1])
        told.append("The mesh was inside out and was turned.")
    numbers = shells_of(mesh)
    shells = {n: part_of(mesh, faces) for n, faces in enumerate(numbers)}
    outer = [s for s in shells.values() if s.volume > 0]
    lonely = [n for n, s in shells.items() if s.volume < 0 and not is_cavity(s, outer)]
    if lonely:
        faces = mesh.faces.copy()
        for n in lonely:
            faces[numbers[n]] = faces[numbers[n]][:, ::-1]
        mesh = replace(mesh, faces=faces)
        told.append(f"Closed shells that were inside out and were turned: {len(lonely)}.")
    return mesh, " ".join(told)

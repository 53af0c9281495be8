"""The surface of every label of a volume, neighbours sharing the same triangles of their interface.

Faces between voxels are taken exactly. Where a label meets itself only along an edge, a plain
surface would have four faces there, which readers call not watertight: the four corners round such
an edge are given to that label over a width of 1/32 of a voxel (`EDGE`), and all corners round its
two ends, so that each surface has two faces at every edge and together they still fill space.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.io.label_seams import Seams, find_seams, octants
from voxelmat.model.mesh import TriangleMesh
from voxelmat.model.volume import Volume

__all__ = ["EDGE", "LabelSurfaces", "label_surfaces"]

Ints = NDArray[np.int64]

#: Width, in voxels, by which an edge where a label touches itself is thickened.
EDGE = 1 / 32
_CORNERS = ((0, 0), (1, 0), (1, 1), (0, 1))


@dataclass(frozen=True, slots=True, eq=False)
class LabelSurfaces:
    """Triangles between labels, on shared vertices.

    Attributes
    ----------
    vertices : (n, 3) float64
        mm.
    faces : (m, 3) int64
        Anticlockwise seen from `outer`.
    inner, outer : (m,) uint16
        The labels on both sides; 0 is empty.
    touching, mended : int
        Edges along which a label touched only itself; edges that were given to one label for it.
    """

    vertices: NDArray[np.float64]
    faces: Ints
    inner: NDArray[np.uint16]
    outer: NDArray[np.uint16]
    touching: int
    mended: int

    def of(self, label: int, name: str) -> TriangleMesh:
        """The closed surface of one label."""
        faces = np.concatenate(
            (self.faces[self.inner == label], self.faces[self.outer == label][:, ::-1])
        )
        used, new = np.unique(faces, return_inverse=True)
        return TriangleMesh(
            vertices=self.vertices[used], faces=new.reshape(-1, 3).astype(np.int32), name=name
        )

    def smoothed(self, rounds: int, largest: NDArray[np.float64]) -> LabelSurfaces:
        """Move the shared vertices `rounds` times towards their neighbours and back.

        Taubin 1995 ("A signal processing approach to fair surface design", SIGGRAPH 95): factors
        .5 and -.53. No vertex moves farther than `largest` (mm) along an axis. Surfaces stay
        closed and shared; thin details may fold.
        """
        n = len(self.vertices)
        ends = np.concatenate([self.faces[:, [a, (a + 1) % 3]] for a in range(3)])
        both = np.concatenate((ends, ends[:, ::-1]))
        degree = np.bincount(both[:, 0], minlength=n).astype(np.float64)[:, None]
        at = self.vertices
        for turn in range(2 * rounds):
            mean = np.stack(
                [np.bincount(both[:, 0], at[both[:, 1], a], minlength=n) for a in range(3)], axis=1
            )
            step = (mean / degree - at) * (0.5 if turn % 2 == 0 else -0.53)
            at = np.clip(at + step, self.vertices - largest, self.vertices + largest)
        return LabelSurfaces(at, self.faces, self.inner, self.outer, self.touching, self.mended)


class _Faces:
    """Collects polygons whose corners lie on a lattice of four steps a voxel."""

    def __init__(self) -> None:
        self.triangles: list[Ints] = []
        self.inner: list[NDArray[Any]] = []
        self.outer: list[NDArray[Any]] = []

    def triangle(self, corners: Ints, inner: NDArray[Any], outer: NDArray[Any]) -> None:
        """`corners`: (n, 3 corners, 3 axes)."""
        self.triangles.append(corners)
        self.inner.append(inner)
        self.outer.append(outer)

    def quads(self, corners: Ints, inner: NDArray[Any], outer: NDArray[Any]) -> None:
        """`corners`: (n, 4 corners, 3 axes)."""
        for pick in ([0, 1, 2], [0, 2, 3]):
            self.triangle(corners[:, pick], inner, outer)


def _voxel_faces(faces: _Faces, padded: NDArray[np.uint16], seams: Seams, axis: int) -> None:
    """All faces between voxels normal to `axis`; those at a seam are cut back from it."""
    low = tuple(slice(0, -1) if a == axis else slice(1, -1) for a in range(3))
    high = tuple(slice(1, None) if a == axis else slice(1, -1) for a in range(3))
    inner, outer = padded[low], padded[high]
    where = np.argwhere(inner != outer)
    if not len(where):
        return
    inner, outer = inner[tuple(where.T)], outer[tuple(where.T)]
    u, v = (axis + 1) % 3, (axis + 2) % 3
    nodes = np.repeat(where[:, None], 4, axis=1)
    for c, (a, b) in enumerate(_CORNERS):
        nodes[:, c, u] += a
        nodes[:, c, v] += b
    dirty = seams.dirty[tuple(nodes.reshape(-1, 3).T)].reshape(-1, 4)
    plain = ~dirty.any(axis=1)
    faces.quads(4 * nodes[plain], inner[plain], outer[plain])
    if not plain.all():
        cut = ~plain
        _cut_faces(faces, nodes[cut], dirty[cut], seams, (axis, u, v), inner[cut], outer[cut])


def _cut_faces(
    faces: _Faces,
    nodes: Ints,
    dirty: NDArray[np.bool_],
    seams: Seams,
    axes: tuple[int, int, int],
    inner: NDArray[Any],
    outer: NDArray[Any],
) -> None:
    """Fans round the middle of faces whose corners or edges are cut away by a seam."""
    _, u, v = axes
    n = len(nodes)
    mended = np.zeros((n, 4), dtype=bool)  # edge c goes from corner c to corner c + 1
    for c in range(4):
        along = u if c % 2 == 0 else v
        start = np.minimum(nodes[:, c], nodes[:, (c + 1) % 4])
        mended[:, c] = seams.edges[along][tuple(start.T)] > 0
    points = np.zeros((n, 12, 3), dtype=np.int64)
    there = np.zeros((n, 12), dtype=bool)
    for c, (a, b) in enumerate(_CORNERS):
        inward = np.zeros((2, 3), dtype=np.int64)
        inward[0, u], inward[1, v] = 1 - 2 * a, 1 - 2 * b
        before, after = (inward[1], inward[0]) if c % 2 == 0 else (inward[0], inward[1])
        base = 4 * nodes[:, c]
        points[:, 3 * c] = base + before
        points[:, 3 * c + 1] = base + np.where(dirty[:, c, None], before + after, 0)
        points[:, 3 * c + 2] = base + after
        there[:, 3 * c] = dirty[:, c] & ~mended[:, c - 1]
        there[:, 3 * c + 1] = True
        there[:, 3 * c + 2] = dirty[:, c] & ~mended[:, c]
    face, slot = np.nonzero(there)
    following = np.arange(1, len(face) + 1)
    last = np.flatnonzero(np.append(face[1:] != face[:-1], True))
    following[last] = np.append(0, last[:-1] + 1)
    rim = points[face, slot]
    middle = 2 * (nodes[:, 0] + nodes[:, 2])
    corners = np.stack((middle[face], rim, rim[following]), axis=1)
    faces.triangle(corners, inner[face], outer[face])


def _oriented(corners: Ints, axis: int, side: int) -> Ints:
    """Quads given anticlockwise about +axis, turned where they face the other way."""
    return corners if side > 0 else corners[:, ::-1]


def _column_faces(faces: _Faces, padded: NDArray[np.uint16], seams: Seams, axis: int) -> None:
    """The long sides of the thin columns along mended edges."""
    where = np.argwhere(seams.edges[axis] > 0)
    if not len(where):
        return
    label = seams.edges[axis][tuple(where.T)]
    u, v = (axis + 1) % 3, (axis + 2) % 3
    for a, b in _CORNERS:
        voxel = where.copy()  # in the padded array the low neighbour of node n is voxel n
        voxel[:, axis] += 1
        voxel[:, u] += a
        voxel[:, v] += b
        other = padded[tuple(voxel.T)]
        for normal, across, side, way in (
            (u, v, 2 * a - 1, 2 * b - 1),
            (v, u, 2 * b - 1, 2 * a - 1),
        ):
            pick = other != label
            base = 4 * where[pick]
            quad = np.repeat(base[:, None], 4, axis=1)
            quad[:, :, normal] += side
            first, second = (normal + 1) % 3, (normal + 2) % 3
            spans = {axis: (1, 3), across: (min(0, way), max(0, way))}
            for c, (p, q) in enumerate(_CORNERS):
                quad[:, c, first] += spans[first][p]
                quad[:, c, second] += spans[second][q]
            faces.quads(_oriented(quad, normal, side), label[pick], other[pick])


def _knot_faces(faces: _Faces, padded: NDArray[np.uint16], seams: Seams) -> None:
    """The outer sides of the small cubes at nodes where mended edges end."""
    where = np.argwhere(seams.dirty)
    if not len(where):
        return
    label = seams.knots
    around = octants(padded, where)
    arms = seams.arms(where)
    for octant in np.ndindex(2, 2, 2):
        own = around[(slice(None), *octant)]
        for axis in range(3):
            side = octant[axis]
            arm = arms[:, axis, side]
            other = np.where(arm > 0, arm, own)
            pick = other != label
            quad = np.repeat(4 * where[pick][:, None], 4, axis=1)
            way = [2 * o - 1 for o in octant]
            quad[:, :, axis] += way[axis]
            u, v = (axis + 1) % 3, (axis + 2) % 3
            for c, (p, q) in enumerate(_CORNERS):
                quad[:, c, u] += (min(0, way[u]), max(0, way[u]))[p]
                quad[:, c, v] += (min(0, way[v]), max(0, way[v]))[q]
            faces.quads(_oriented(quad, axis, way[axis]), label[pick], other[pick])


def label_surfaces(volume: Volume) -> LabelSurfaces:
    """Surfaces between all labels of a volume (see the module's first lines).

    Parameters
    ----------
    volume : Volume
        Labels; partly full voxels are taken as `Volume.crisp` takes them.

    Returns
    -------
    LabelSurfaces
        Volumes of the labels add up to that of all labelled voxels, to rounding, but for mended
        edges at the outside: each adds at most ``4 EDGE^2`` of a voxel and each of its ends
        ``8 EDGE^3``.
    """
    labels = volume.crisp().values
    padded = np.pad(labels, 1)
    seams = find_seams(padded)
    faces = _Faces()
    for axis in range(3):
        _voxel_faces(faces, padded, seams, axis)
        _column_faces(faces, padded, seams, axis)
    _knot_faces(faces, padded, seams)
    if not faces.triangles:
        empty = np.zeros(0, dtype=np.uint16)
        return LabelSurfaces(np.zeros((0, 3)), np.zeros((0, 3), dtype=np.int64), empty, empty, 0, 0)
    corners = np.concatenate(faces.triangles) + 4
    size = 4 * (np.array(labels.shape) + 3)
    key = (corners[..., 2] * size[1] + corners[..., 1]) * size[0] + corners[..., 0]
    unique, index = np.unique(key, return_inverse=True)
    q = np.stack((unique % size[0], unique // size[0] % size[1], unique // (size[0] * size[1])), 1)
    part = np.array([0.0, EDGE, 0.5, 1.0 - EDGE])[q % 4]
    vertices = np.array(volume.grid.origin) + (q // 4 - 1 + part) * np.array(volume.grid.spacing)
    return LabelSurfaces(
        vertices,
        index.reshape(-1, 3),
        np.concatenate(faces.inner).astype(np.uint16),
        np.concatenate(faces.outer).astype(np.uint16),
        seams.touching,
        seams.mended,
    )

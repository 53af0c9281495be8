"""What is wrong with a mesh, and where: holes, crossings, wrong winding, wasted faces."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.mesh import TriangleMesh
from voxelmat.shape.inside import contains
from voxelmat.shape.shells import Edges, edges_of, part_of, shells_of
from voxelmat.shape.tree import LEAF, box_tree
from voxelmat.shape.words import place_text

__all__ = ["Defect", "find_defects", "require_sound"]

#: A corner nearer to a plane than this, relative to the triangles' size, lies on it.
FLAT = 1e-12
_PAIRS = 20_000_000  # triangle pairs looked at for crossings: about ten seconds
_LISTED = 10_000  # crossings after which the search stops


@dataclass(frozen=True, slots=True, kw_only=True)
class Defect:
    """One thing that is wrong with a mesh.

    Attributes
    ----------
    kind : str
        "open", "non-manifold", "winding", "inverted", "crossing", "overlap",
        "degenerate", "duplicate" or "unchecked".
    count : int
        Edges, faces, shells or pairs concerned.
    place : tuple of float
        Where the first of them is, mm.
    blocks : bool
        Whether the mesh cannot be voxelised as it is.
    message : str
        What is wrong, where, and what to do.
    """

    kind: str
    count: int
    place: tuple[float, float, float]
    blocks: bool
    message: str


def _defect(kind: str, count: int, place: NDArray[np.float64], blocks: bool, text: str) -> Defect:
    where = (float(place[0]), float(place[1]), float(place[2]))
    return Defect(
        kind=kind,
        count=count,
        place=where,
        blocks=blocks,
        message=text.format(n=count, at=f"at {place_text(where)}"),
    )


def find_defects(mesh: TriangleMesh, *, crossings: bool = True) -> list[Defect]:
    """List what is wrong with a mesh; empty when it is sound.

    Parameters
    ----------
    mesh : TriangleMesh
    crossings : bool
        Also look for triangles that cross each other; the slowest test.
    """
    if not len(mesh.faces):
        raise InputError(f"Mesh '{mesh.name}' has no faces. Export it as a triangle mesh.")
    edges = edges_of(mesh.faces)
    found = _edge_defects(mesh, edges) + _face_defects(mesh)
    if not edges.turn.any():
        found += _shell_defects(mesh)
    if crossings:
        found += _crossing_defects(mesh)
    return sorted(found, key=lambda d: not d.blocks)


def require_sound(mesh: TriangleMesh, *, crossings: bool = True) -> list[str]:
    """Raise `InputError` if a defect keeps the mesh from being voxelised.

    Returns
    -------
    list of str
        The defects that do not matter to the voxels, in words.
    """
    found = find_defects(mesh, crossings=crossings)
    blocking = [d.message for d in found if d.blocks]
    if blocking:
        raise InputError(f"Mesh '{mesh.name}': " + " ".join(blocking), file=mesh.source or None)
    return [d.message for d in found]


def _edge_defects(mesh: TriangleMesh, edges: Edges) -> list[Defect]:
    middle = mesh.vertices[edges.ends].mean(axis=1)
    found = []
    hole = np.flatnonzero(edges.uses == 1)
    if hole.size:
        text = (
            "It is open: {n} edges have a face on one side only, the first {at}. Close the hole "
            "in the program that made the mesh, or mend it with fill_holes allowed."
        )
        found.append(_defect("open", hole.size, middle[hole[0]], True, text))
    twisted = np.flatnonzero((edges.uses == 2) & (edges.turn != 0))
    if twisted.size:
        text = (
            "Its faces do not agree which side is outside: across {n} edges the winding flips, "
            "first {at}. Mend it with repair allowed."
        )
        found.append(_defect("winding", twisted.size, middle[twisted[0]], True, text))
    many = np.flatnonzero(edges.uses > 2)
    if many.size:
        # As many faces one way as the other still bound an inside: two blocks edge to edge.
        bad = many[edges.turn[many] != 0]
        first = bad[0] if bad.size else many[0]
        advice = (
            "Remove the extra sheets in the program that made the mesh."
            if bad.size
            else "The body touches itself there; its inside is still known."
        )
        text = "{n} edges are shared by more than two faces, the first {at}. " + advice
        found.append(_defect("non-manifold", many.size, middle[first], bool(bad.size), text))
    return found


def _face_defects(mesh: TriangleMesh) -> list[Defect]:
    found = []
    thin = degenerate_faces(mesh)
    if thin.size:
        text = "{n} faces have no area, the first {at}; they change nothing."
        place = mesh.triangles[thin[0]].mean(axis=0)
        found.append(_defect("degenerate", thin.size, place, False, text))
    twins = duplicate_faces(mesh)
    if twins.size:
        text = "{n} faces stand there twice, the first {at}. Mend it with repair allowed."
        place = mesh.triangles[twins[0]].mean(axis=0)
        found.append(_defect("duplicate", twins.size, place, True, text))
    return found


def degenerate_faces(mesh: TriangleMesh) -> NDArray[np.int64]:
    """Faces without area: a corner used twice, or three corners in line."""
    a, b, c = mesh.triangles.transpose(1, 0, 2)
    area = np.linalg.norm(np.cross(b - a, c - a), axis=1)
    longest = np.maximum(np.linalg.norm(b - a, axis=1), np.linalg.norm(c - a, axis=1))
    return np.flatnonzero(area <= FLAT * longest**2)


def duplicate_faces(mesh: TriangleMesh) -> NDArray[np.int64]:
    """Faces that repeat an earlier one, with the same winding."""
    start = mesh.faces.argmin(axis=1)
    turned = np.take_along_axis(mesh.faces, (start[:, None] + np.arange(3)) % 3, axis=1)
    _, first = np.unique(turned, axis=0, return_index=True)
    repeated = np.ones(len(turned), dtype=bool)
    repeated[first] = False
    return np.flatnonzero(repeated)


def _shell_defects(mesh: TriangleMesh) -> list[Defect]:
    """Closed shells that are inside out, other than cavities."""
    shells = [part_of(mesh, faces) for faces in shells_of(mesh)]
    outer = [s for s in shells if s.volume > 0]
    inverted = [s for s in shells if s.volume < 0 and not is_cavity(s, outer)]
    flat = [s for s in shells if s.volume == 0]
    found = []
    if inverted:
        text = (
            "It is inside out: closed shells with normals inwards: {n}, the first {at}. "
            "Flip the normals, or mend it with repair allowed."
        )
        place = inverted[0].vertices.mean(axis=0)
        found.append(_defect("inverted", len(inverted), place, True, text))
    if flat:
        text = "{n} shells enclose no volume, the first {at}; nothing of them is printed."
        found.append(_defect("degenerate", len(flat), flat[0].vertices.mean(axis=0), False, text))
    return found


def is_cavity(shell: TriangleMesh, outer: list[TriangleMesh]) -> bool:
    """Whether an inside-out shell lies inside one of the outer shells."""
    return any(bool(contains(body, shell.vertices[:1])[0]) for body in outer)


def _crossing_defects(mesh: TriangleMesh) -> list[Defect]:
    from voxelmat.kernels.crossing import crossing_pairs

    tree = box_tree(mesh.triangles)
    pairs = np.empty((_LISTED, 2), dtype=np.int64)
    found, looked = crossing_pairs(
        mesh.vertices,
        np.ascontiguousarray(mesh.faces[tree.order]),
        tree.nodes,
        tree.order,
        LEAF,
        FLAT,
        _PAIRS,
        pairs,
    )
    defects = []
    pairs = pairs[:found]
    shell = np.empty(len(mesh.faces), dtype=np.int64)
    closed = {}
    for n, faces in enumerate(shells_of(mesh)):
        shell[faces] = n
        closed[n] = not edges_of(mesh.faces[faces]).turn.any()
    of_pair = shell[pairs]
    within = of_pair[:, 0] == of_pair[:, 1]
    whole = np.array([closed[int(a)] and closed[int(b)] for a, b in of_pair], dtype=bool)
    for kind, some in (("crossing", pairs[within | ~whole]), ("overlap", pairs[~within & whole])):
        if not len(some):
            continue
        text = (
            "It crosses itself: {n} pairs of faces pass through each other, the first {at}. Repair "
            "it in the program that made it, for example by a union with itself."
            if kind == "crossing"
            else "Closed shells overlap: {n} pairs of faces cross, the first {at}. The shells are "
            "joined into one body by the winding number."
        )
        if found == _LISTED:
            text = text.replace("{n} pairs", "at least {n} pairs")
        place = _meeting_point(*mesh.triangles[some[0]])
        defects.append(_defect(kind, len(some), place, kind == "crossing", text))
    if looked == _PAIRS:
        text = (
            "Not all of it was checked for crossings: {n} pairs of faces were looked at, many lie "
            "on top of each other, the first {at}."
        )
        place = mesh.triangles[0].mean(axis=0)
        defects.append(_defect("unchecked", looked, place, False, text))
    return defects


def _meeting_point(f: NDArray[np.float64], g: NDArray[np.float64]) -> NDArray[np.float64]:
    """A point where an edge of one triangle passes through the other."""
    for one, two in ((f, g), (g, f)):
        normal = np.cross(two[1] - two[0], two[2] - two[0])
        for p, q in zip(one, np.roll(one, -1, axis=0), strict=True):
            before, after = (p - two[0]) @ normal, (q - two[0]) @ normal
            if before * after >= 0:
                continue
            point: NDArray[np.float64] = p + before / (before - after) * (q - p)
            sides = np.cross(np.roll(two, -1, axis=0) - two, point - two) @ normal
            if (sides >= 0).all():
                return point
    middle: NDArray[np.float64] = np.concatenate([f, g]).mean(axis=0)
    return middle

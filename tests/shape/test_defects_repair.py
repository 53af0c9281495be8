"""Broken meshes: what is said about each, where, and what a repair makes of it."""

import math
import re

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.model.mesh import TriangleMesh
from voxelmat.shape.defects import find_defects, require_sound
from voxelmat.shape.repair import mend
from voxelmat.shape.shells import edges_of, shells_of
from voxelmat.shape.solid import box, cylinder, icosphere, revolve, tube
from voxelmat.shape.voxelise import grid_for, voxelise

BALL = icosphere(2, 10, name="ball")


def remade(mesh, vertices=None, faces=None):
    return TriangleMesh(
        vertices=mesh.vertices if vertices is None else vertices,
        faces=mesh.faces if faces is None else faces,
        name=mesh.name,
    )


def joined(*meshes):
    offsets = np.cumsum([0, *(len(m.vertices) for m in meshes)])
    return TriangleMesh(
        vertices=np.concatenate([m.vertices for m in meshes]),
        faces=np.concatenate([m.faces + o for m, o in zip(meshes, offsets, strict=False)]),
    )


def kinds(mesh):
    return {d.kind for d in find_defects(mesh)}


@pytest.mark.parametrize(
    "mesh",
    [BALL, box((1, 2, 3)), cylinder(1, 0, 2), tube(1, 2, 0, 3), revolve([(0, 0), (3, 1), (0, 4)])],
    ids=["ball", "box", "cylinder", "tube", "revolved"],
)
def test_primitives_are_sound(mesh):
    assert find_defects(mesh) == []
    assert mend(mesh) == (mesh, ())
    assert mesh.volume > 0
    edges = edges_of(mesh.faces)
    # Euler's polyhedron formula, V - E + F = 2 (0 for a tube).
    euler = len(mesh.vertices) - len(edges.ends) + len(mesh.faces)
    assert euler == (0 if mesh.name == "tube" else 2)


@pytest.mark.parametrize(
    ("make", "text"),
    [
        (lambda: box((1, 0, 1)), "positive length"),
        (lambda: icosphere(12), "0 to 8"),
        (lambda: cylinder(1, 2, 0), "low z to high z"),
        (lambda: tube(2, 1, 0, 1), "inner < outer"),
        (lambda: revolve([(1, 0)]), "at least two"),
        (lambda: revolve([(0, 0), (0, 1)]), "off the axis"),
        (lambda: revolve([(1, 0), (-1, 1), (1, 2)]), "radii"),
        (lambda: revolve([(1, 0), (math.nan, 1)]), "radii"),
    ],
)
def test_impossible_primitives_are_refused(make, text):
    with pytest.raises(InputError, match=text):
        make()


def test_open_mesh_is_refused_with_the_place():
    hole = BALL.triangles[7].mean(axis=0)
    opened = remade(BALL, faces=np.delete(BALL.faces, 7, axis=0))
    (defect,) = find_defects(opened)
    assert (defect.kind, defect.count, defect.blocks) == ("open", 3, True)
    assert np.linalg.norm(np.array(defect.place) - hole) < 3
    numbers = [float(x) for x in re.findall(r"-?\d+\.?\d*", defect.message.split("at (")[1])[:3]]
    assert numbers == pytest.approx(defect.place, abs=5e-4)
    with pytest.raises(InputError, match=r"'ball': It is open: 3 edges .* mm"):
        mend(opened)


def test_a_small_flat_hole_is_filled_only_if_allowed():
    opened = remade(BALL, faces=np.delete(BALL.faces, 7, axis=0))
    filled, told = mend(opened, fill_holes=True)
    assert "a hole of 3 edges at (" in told[0]
    assert filled.volume == pytest.approx(BALL.volume, rel=1e-12)
    top = cylinder(5, 0, 10, 40)
    lid = np.flatnonzero((top.triangles[:, :, 2] == 10).all(axis=1))
    opened = remade(top, faces=np.delete(top.faces, lid, axis=0))
    with pytest.raises(InputError, match="open: 40 edges"):
        mend(opened, fill_holes=True)
    filled, _ = mend(opened, fill_holes=True, max_hole_edges=40)
    assert filled.volume == pytest.approx(top.volume, rel=1e-12)


def test_a_bent_hole_is_not_filled():
    half = BALL.triangles[:, :, 2].mean(axis=1) + BALL.triangles[:, :, 0].mean(axis=1) ** 2 / 9
    opened = remade(BALL, faces=BALL.faces[half < 4])
    with pytest.raises(InputError, match="open"):
        mend(opened, fill_holes=True, max_hole_edges=1000)


def test_inside_out_mesh_is_turned_and_told():
    inverted = remade(BALL, faces=BALL.faces[:, ::-1])
    assert kinds(inverted) == {"inverted"}
    with pytest.raises(InputError, match="inside out"):
        mend(inverted, repair=False)
    fixed, told = mend(inverted)
    assert fixed.volume == pytest.approx(BALL.volume)
    assert told == ("The mesh was inside out and was turned.",)


def test_cavity_is_not_turned_but_a_whole_inverted_part_is():
    inner = icosphere(1, 3)
    hollow = joined(BALL, remade(inner, faces=inner.faces[:, ::-1]))
    assert mend(hollow) == (hollow, ())
    inverted = remade(hollow, faces=hollow.faces[:, ::-1])
    fixed, told = mend(inverted)
    assert fixed.volume == pytest.approx(hollow.volume)
    assert len(told) == 1
    beside = joined(BALL, remade(inner, inner.vertices + 30, inner.faces[:, ::-1]))
    assert kinds(beside) == {"inverted"}
    fixed, told = mend(beside)
    assert fixed.volume == pytest.approx(BALL.volume + inner.volume)
    assert "turned: 1" in told[0]


@settings(deadline=None, max_examples=15)
@given(seed=st.integers(0, 2**20), count=st.integers(1, 60))
def test_any_mixed_winding_is_made_to_agree(seed, count):
    chosen = np.random.default_rng(seed).choice(len(BALL.faces), count, replace=False)
    faces = BALL.faces.copy()
    faces[chosen] = faces[chosen][:, ::-1]
    mixed = remade(BALL, faces=faces)
    assert "winding" in kinds(mixed)
    fixed, told = mend(mixed)
    assert fixed.volume == pytest.approx(BALL.volume)
    assert "turned round" in told[0]


def test_one_sided_surface_is_refused():
    # A Moebius band: five triangles, its two ends joined with a half turn.
    vertices = np.random.default_rng(1).normal(size=(5, 3))
    faces = [[i, (i + 1) % 5, (i + 2) % 5] for i in range(5)]
    with pytest.raises(InputError, match="open"):
        mend(TriangleMesh(vertices=vertices, faces=faces))


def test_loose_corners_are_welded():
    corners = BALL.triangles.reshape(-1, 3)
    shaken = corners + np.random.default_rng(0).uniform(-1e-6, 1e-6, corners.shape)
    soup = TriangleMesh(vertices=shaken, faces=np.arange(len(corners)).reshape(-1, 3))
    assert "open" in kinds(soup)
    fixed, told = mend(soup)
    assert fixed.volume == pytest.approx(BALL.volume, rel=1e-6)
    assert "welded" in told[0]


def test_repeated_and_collapsed_faces_are_dropped():
    twice = remade(BALL, faces=np.vstack([BALL.faces, BALL.faces[:2], [[5, 5, 9]]]))
    assert {"duplicate", "degenerate"} <= kinds(twice)
    collapsed = remade(BALL, faces=np.vstack([BALL.faces, [[5, 5, 9]]]))
    assert not any(d.blocks for d in find_defects(collapsed))
    grid = grid_for(BALL, 2.0)
    assert (voxelise(collapsed, grid).distance == voxelise(BALL, grid).distance).all()
    fixed, told = mend(twice)
    assert len(fixed.faces) == len(BALL.faces)
    assert "3 faces" in told[0]
    point = TriangleMesh(vertices=[[0, 0, 0]], faces=[[0, 0, 0]])
    with pytest.raises(InputError):
        mend(point)
    with pytest.raises(InputError, match="no faces"):
        mend(TriangleMesh(vertices=[], faces=[]))


def test_self_crossing_is_refused_with_the_place():
    vertices = BALL.vertices.copy()
    vertices[0] *= -1.5
    crossed = remade(BALL, vertices=vertices)
    found = [d for d in find_defects(crossed) if d.kind == "crossing"]
    assert found
    assert found[0].blocks
    # The spike leaves the ball on the far side, where a flat face hides up to 3 mm of it.
    assert 7 < np.linalg.norm(found[0].place) < 10
    with pytest.raises(InputError, match=r"crosses itself: \d+ pairs .* mm"):
        mend(crossed)


def test_overlapping_closed_shells_are_told_not_refused():
    two = joined(BALL, icosphere(2, 10, (12, 0.1, 0.2)))
    assert len(shells_of(two)) == 2
    same, told = mend(two)
    assert same is two
    assert "Closed shells overlap" in told[0]


def test_blocks_that_touch_along_an_edge_are_told_not_refused():
    a = box((1, 1, 1))
    b = box((1, 1, 1), (1, 1, 0))
    both = joined(a, b)
    unique, which = np.unique(both.vertices, axis=0, return_inverse=True)
    welded = TriangleMesh(vertices=unique, faces=which.reshape(-1)[both.faces])
    told = require_sound(welded)
    assert len(told) == 1
    assert "more than two faces" in told[0]
    three = remade(welded, faces=np.vstack([welded.faces, [[0, 1, 2]]]))
    with pytest.raises(InputError):
        require_sound(three)

"""Gaps of rigid indenters."""

import numpy as np
import pytest

from voxelmat.errors import InputError
from voxelmat.model.indenter import (
    CylinderIndenter,
    FlatPunch,
    Indenter,
    MeshIndenter,
    SphereIndenter,
    direction,
)
from voxelmat.model.mesh import TriangleMesh

pytestmark = pytest.mark.nojit


def square(z, half=1.0, rise=0.0):
    """Two triangles that look down; the side at x = +half lies `rise` higher."""
    corners = [(x, y, z + rise * (x > 0)) for x in (-half, half) for y in (-half, half)]
    faces = np.array([(0, 1, 2), (1, 3, 2)], dtype=np.int32)
    return TriangleMesh(vertices=np.array(corners), faces=faces)


def test_flat_ends():
    points = np.array([(0.0, 0.0, 1.0), (1.0, 0.0, 2.0), (1.0, 1.0, 3.0), (5.0, 0.0, 0.0)])
    at = (0.0, 0.0, 4.0)
    plane, normal = FlatPunch(position=at).gap(points)
    np.testing.assert_array_equal(plane, [3.0, 2.0, 1.0, 4.0])
    np.testing.assert_array_equal(normal, np.tile([0.0, 0.0, -1.0], (4, 1)))
    np.testing.assert_array_equal(
        FlatPunch(position=at, radius=1.0).gap(points)[0], [3.0, 2.0, np.inf, np.inf]
    )
    np.testing.assert_array_equal(
        FlatPunch(position=at, size=(2.0, 2.0)).gap(points)[0], [3.0, 2.0, 1.0, np.inf]
    )


@pytest.mark.parametrize("push", ["x-", "x+", "y-", "y+", "z-", "z+"])
def test_a_ball_meets_the_point_when_its_centre_is_a_radius_away(push):
    rng = np.random.default_rng(3)
    ball = SphereIndenter(position=(0.1, -0.2, 0.3), push=push, radius=2.0)
    points = rng.uniform(-3.0, 3.0, (200, 3))
    gap, normal = ball.gap(points)
    way = direction(push)
    off = points - ball.position
    off -= np.outer(off @ way, way)
    meets = np.linalg.norm(off, axis=1) <= 2.0
    np.testing.assert_array_equal(np.isfinite(gap), meets)
    centre = np.asarray(ball.position) - 2.0 * way + gap[meets, None] * way
    np.testing.assert_allclose(points[meets] - centre, 2.0 * normal[meets], atol=1e-12)
    assert isinstance(ball, Indenter)


def test_a_roller_is_a_ball_across_and_a_line_along():
    points = np.array([(x, y, 0.0) for x in (-0.5, 0.0, 0.7) for y in (-4.0, 0.0, 4.0)])
    roller = CylinderIndenter(radius=1.0, along="y", position=(0.0, 0.0, 1.0), length=6.0)
    gap, normal = roller.gap(points)
    inside = np.abs(points[:, 1]) <= 3.0
    np.testing.assert_array_equal(np.isfinite(gap), inside)
    flat = points.copy()
    flat[:, 1] = 0.0
    ball, slope = SphereIndenter(radius=1.0, position=(0.0, 0.0, 1.0)).gap(flat)
    np.testing.assert_allclose(gap[inside], ball[inside])
    np.testing.assert_allclose(normal[inside], slope[inside])


def test_a_mesh_that_is_a_tilted_square():
    tilted = MeshIndenter(mesh=square(0.0, rise=0.5), position=(10.0, 0.0, 5.0))
    points = np.array([(9.0, 0.0, 5.0), (10.0, 0.3, 4.0), (11.0, -1.0, 5.0), (12.0, 0.0, 5.0)])
    gap, normal = tilted.gap(points)
    np.testing.assert_allclose(gap, [0.0, 1.25, 0.5, np.inf])
    expected = np.array([0.25, 0.0, -1.0]) / np.hypot(0.25, 1.0)
    np.testing.assert_allclose(normal[:3], np.tile(expected, (3, 1)), atol=1e-12)


def test_a_mesh_pushed_other_ways_and_one_that_looks_away():
    # the same square turned so that it looks along +x
    corners = square(0.0).vertices[:, [2, 1, 0]]
    mesh = TriangleMesh(vertices=corners, faces=square(0.0).faces)
    along = MeshIndenter(mesh=mesh, push="x+")
    back = MeshIndenter(mesh=mesh, push="x-")
    point = np.array([(2.0, 0.5, 0.5)])
    gaps = along.gap(point)[0][0], back.gap(point)[0][0]
    # it has one face only, so it meets the point from one side
    assert sorted(gaps) == [2.0, np.inf]


@pytest.mark.parametrize(
    ("make", "match"),
    [
        (lambda: FlatPunch(radius=1.0, size=(1.0, 1.0)), "radius or a size"),
        (lambda: FlatPunch(radius=-1.0), "radius must be above 0"),
        (lambda: FlatPunch(size=(1.0, 0.0)), "edge must be above 0"),
        (lambda: FlatPunch(push="down"), "a side is one of"),
        (lambda: FlatPunch(position=(0.0, 0.0, np.nan)), "three finite numbers"),
        (lambda: SphereIndenter(radius=np.inf), "radius must be above 0"),
        (lambda: CylinderIndenter(radius=1.0, along="z"), "other two axes"),
        (lambda: CylinderIndenter(radius=1.0, along="x", length=0.0), "length must be above 0"),
        (
            lambda: MeshIndenter(
                mesh=TriangleMesh(vertices=np.zeros((0, 3)), faces=np.zeros((0, 3), np.int32))
            ),
            "no triangles",
        ),
        (lambda: FlatPunch().gap(np.zeros(3)), "form a table"),
    ],
)
def test_bad_input(make, match):
    with pytest.raises(InputError, match=match):
        make()

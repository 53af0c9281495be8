"""Exposed faces: projected areas, closed surfaces, and the true area of a voxelised ball."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.model.grid import VoxelGrid
from voxelmat.model.material import Constant, Material
from voxelmat.model.part import DISTANCE_STEPS, Part
from voxelmat.model.region import PatchRegion
from voxelmat.model.surface import exposed_faces, visible_from

RESIN = Material(
    name="example",
    kind="rigid",
    E=Constant(value=1000.0),
    nu=Constant(value=0.3),
    density=Constant(value=1.1e-9),
)


def made(labels, spacing=(1.0, 1.0, 1.0), **more):
    part = Part.uniform(VoxelGrid(shape=labels.shape, spacing=spacing), RESIN)
    return part.replace(labels=labels.astype(int), **more)


def ball(n, spacing=(1.0, 1.0, 1.0), distance=True):
    """A ball of radius .42 of the box, centre off the grid's symmetry, with its distance."""
    size = np.array(spacing) * n
    axes = [h * (np.arange(n) + 0.5) for h in spacing]
    x, y, z = np.meshgrid(*axes, indexing="ij")
    radius = 0.42 * size.min()
    c = size / 2 + np.array([0.11, -0.17, 0.23]) * min(spacing)
    d = np.sqrt((x - c[0]) ** 2 + (y - c[1]) ** 2 + (z - c[2]) ** 2) - radius
    steps = np.clip(np.rint(d * DISTANCE_STEPS / min(spacing)), -127, 127).astype(int)
    return made(d < 0, spacing, **({"distance": steps} if distance else {})), radius


@settings(deadline=None, max_examples=25)
@given(
    seed=st.integers(0, 2**32 - 1),
    shape=st.tuples(*[st.integers(1, 5)] * 3),
    spacing=st.tuples(*[st.floats(0.1, 3)] * 3),
)
def test_faces_against_a_loop_and_closed(seed, shape, spacing):
    part = made(np.random.default_rng(seed).integers(0, 2, shape), spacing)
    faces = exposed_faces(part)
    expected = set()
    for at in np.argwhere(part.solid):
        for axis in range(3):
            for side in (-1, 1):
                other = list(at)
                other[axis] += side
                inside = 0 <= other[axis] < shape[axis]
                if not inside or not part.solid[tuple(other)]:
                    expected.add((*at, axis, side))
    got = zip(faces.voxel, faces.axis, faces.side, strict=True)
    assert {(*v, a, s) for v, a, s in got} == expected
    np.testing.assert_allclose(faces.vector_area.sum(axis=0), 0.0, atol=1e-9)
    # Volume by the divergence theorem from face centres and vector areas.
    volume = (faces.centre * faces.vector_area).sum() / 3
    assert volume == pytest.approx(part.solid.sum() * part.grid.voxel_volume, rel=1e-9, abs=1e-9)


@pytest.mark.parametrize("spacing", [(1.0, 1.0, 1.0), (1.0, 1.0, 1.5)])
def test_true_area_of_a_ball(spacing):
    """4 pi r^2, although the staircase has about 1.5 times that.

    Staircase ratio 1.503: external check values, B3, computed with a separate plain numpy code.
    """
    part, r = ball(48, spacing)
    faces = exposed_faces(part)
    area = 4 * math.pi * r**2
    assert faces.true_area.sum() == pytest.approx(area, rel=0.01)
    if spacing == (1.0, 1.0, 1.0):
        assert faces.area.sum() == pytest.approx(1.503 * area, rel=0.02)


@pytest.mark.parametrize(("side", "axis"), [("z+", 2), ("z-", 2), ("x+", 0), ("y-", 1)])
def test_projected_area_of_a_ball(side, axis):
    """pi r^2, through a patch that is larger than the ball."""
    part, r = ball(48)
    patch = PatchRegion(name="p", side=side, outline=((-9, -9), (99, -9), (99, 99), (-9, 99)))
    towards = patch.faces(part).vector_area[:, axis].sum()
    assert abs(towards) == pytest.approx(math.pi * r**2, rel=0.02)
    assert (towards > 0) == (side[1] == "+")


def test_projected_area_of_a_window_on_a_ball():
    """The area of the window, however steep the surface below it."""
    part, _ = ball(64)
    low, high = 30.0, 50.0
    square = ((low, low), (high, low), (high, high), (low, high))
    faces = PatchRegion(name="p", side="z+", outline=square).faces(part)
    assert faces.vector_area[:, 2].sum() == pytest.approx((high - low) ** 2, rel=0.02)


def test_normals_of_a_ball():
    part, r = ball(48)
    faces = exposed_faces(part)
    centre = faces.centre - faces.centre.mean(axis=0)
    radial = centre / np.linalg.norm(centre, axis=1, keepdims=True)
    cosine = np.einsum("ij,ij->i", radial, faces.normal)
    assert np.degrees(np.arccos(np.clip(cosine, -1, 1))).max() < 6.0
    np.testing.assert_allclose(np.linalg.norm(faces.normal, axis=1), 1.0, atol=1e-12)
    assert r > 15  # so that 6 degrees is about one voxel and a half


def test_without_a_distance_normals_are_those_of_voxels():
    part, _ = ball(16, distance=False)
    faces = exposed_faces(part)
    np.testing.assert_array_equal(faces.true_area, faces.area)


def test_seen_through_a_hole():
    labels = np.ones((3, 3, 3), bool)
    labels[1, 1, :] = False
    labels[1, 2, 1] = False  # a pocket that opens into the hole
    part = made(labels)
    faces = exposed_faces(part)
    seen = faces.select(visible_from(part, faces, 2, 1))
    walls = {tuple(v) for v, a in zip(seen.voxel, seen.axis, strict=True) if a != 2}
    assert (0, 1, 0) in walls  # the wall of the hole, straight down
    assert (1, 2, 0) in walls  # ... under the pocket's mouth too
    floor = [tuple(v) for v, a in zip(seen.voxel, seen.axis, strict=True) if a == 2]
    assert (1, 2, 0) not in floor  # the pocket's floor has a roof over it
    assert set(floor) == {(i, j, 2) for i in range(3) for j in range(3) if (i, j) != (1, 1)}


def test_upright_walls_are_not_seen_but_slopes_are():
    """A wide patch presses on the top of a tall block alone; on a wedge, on the whole slope."""
    x = np.arange(12) + 0.5
    walls = abs(x - 6) - 4
    ends = abs(np.arange(16) + 0.5 - 8) - 6
    inside = np.maximum(np.maximum(walls[:, None, None], walls[None, :, None]), ends[None, None, :])
    steps = np.clip(np.rint(inside * DISTANCE_STEPS), -127, 127).astype(int)
    block = made(inside < 0, distance=steps)
    wide = PatchRegion(name="p", side="z+", outline=((-9, -9), (99, -9), (99, 99), (-9, 99)))
    seen = wide.faces(block)
    np.testing.assert_allclose(seen.vector_area.sum(axis=0), [0, 0, 64], atol=1e-9)
    # At the rim the normal leans outwards; below it nothing of the walls is seen.
    assert seen.voxel[seen.axis != 2, 2].min() >= 13

    slope = (x[:, None, None] + np.zeros((1, 12, 1)) + x[None, None, :] - 12.0) / math.sqrt(2)
    steps = np.clip(np.rint(slope * DISTANCE_STEPS), -127, 127).astype(int)
    wedge = made(slope < 0, distance=steps)
    middle = PatchRegion(name="p", side="z+", outline=((2, 2), (10, 2), (10, 10), (2, 10)))
    push = middle.faces(wedge).vector_area.sum(axis=0)
    assert push[2] == pytest.approx(64)
    assert push[0] == pytest.approx(64, rel=0.13)  # one of eight steps may fall outside
    assert push[1] == 0

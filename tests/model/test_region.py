"""Regions against plain loops over points, and against each other."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.material import Constant, Material
from voxelmat.model.part import Part
from voxelmat.model.region import (
    BodyRegion,
    Box,
    Cylinder,
    FaceRegion,
    HalfSpace,
    LabelRegion,
    MeshRegion,
    PatchRegion,
    Region,
    Sphere,
    parse_side,
    solid_nodes,
)

RESIN = Material(
    name="example",
    kind="rigid",
    E=Constant(value=1000.0),
    nu=Constant(value=0.3),
    density=Constant(value=1.1e-9),
)
COORD = st.floats(-4, 4)
POINT = st.tuples(COORD, COORD, COORD)
SIDES = st.sampled_from(["x-", "x+", "y-", "y+", "z-", "z+"])


@st.composite
def parts(draw):
    shape = tuple(draw(st.lists(st.integers(1, 5), min_size=3, max_size=3)))
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    labels = rng.integers(0, 3, shape)
    labels[tuple(rng.integers(0, shape))] = 1
    return Part(
        grid=VoxelGrid(shape=shape, spacing=(0.7, 1.1, 0.9), origin=(-2.0, -2.0, -2.0)),
        resins=(RESIN, RESIN.replace(name="other")),
        palette=(EMPTY, Blend.pure("example"), Blend.pure("other")),
        labels=labels,
        bodies={"odd": labels == 1},
    )


@st.composite
def regions(draw):
    kind = draw(st.sampled_from(["box", "sphere", "cylinder", "half-space"]))
    a, b = draw(POINT), draw(POINT)
    if kind == "box":
        low = tuple(min(p, q) for p, q in zip(a, b, strict=True))
        return Box(
            name="r", low=low, high=tuple(max(p, q) + 0.1 for p, q in zip(a, b, strict=True))
        )
    if kind == "sphere":
        return Sphere(name="r", centre=a, radius=draw(st.floats(0.1, 4)))
    if kind == "cylinder":
        end = (b[0], b[1], b[2] + 9.0)
        radius = draw(st.floats(0.5, 4))
        inner = draw(st.floats(0, 0.4))
        return Cylinder(name="r", start=a, end=end, radius=radius, inner_radius=inner)
    return HalfSpace(name="r", point=a, normal=(b[0], b[1], b[2] + 9.0))


def held(region, p):
    """Whether a point lies in the region, in plain Python."""
    if isinstance(region, Box):
        return all(a <= x <= b for a, x, b in zip(region.low, p, region.high, strict=True))
    if isinstance(region, Sphere):
        return sum((x - c) ** 2 for x, c in zip(p, region.centre, strict=True)) <= region.radius**2
    if isinstance(region, Cylinder):
        axis = [e - s for s, e in zip(region.start, region.end, strict=True)]
        rel = [x - s for s, x in zip(region.start, p, strict=True)]
        t = sum(a * r for a, r in zip(axis, rel, strict=True)) / sum(a * a for a in axis)
        off = math.sqrt(sum((r - t * a) ** 2 for a, r in zip(axis, rel, strict=True)))
        return 0 <= t <= 1 and region.inner_radius <= off <= region.radius
    return sum(n * (x - q) for n, x, q in zip(region.normal, p, region.point, strict=True)) >= 0


@settings(deadline=None, max_examples=25)
@given(part=parts(), region=regions())
def test_solids_against_a_loop(part, region):
    assert isinstance(region, Region)
    centres, nodes = part.grid.centres(), part.grid.nodes()
    voxels, corners = region.voxels(part), region.nodes(part)
    touched = solid_nodes(part.solid)
    for at in np.ndindex(part.grid.shape):
        p = [float(c[i]) for c, i in zip(centres, at, strict=True)]
        assert voxels[at] == (held(region, p) and part.solid[at])
    for at in np.ndindex(part.grid.node_shape):
        p = [float(c[i]) for c, i in zip(nodes, at, strict=True)]
        assert corners[at] == (held(region, p) and touched[at])
    faces = region.faces(part)
    assert all(held(region, [float(x) for x in c]) for c in faces.centre)


@settings(deadline=None, max_examples=25)
@given(part=parts())
def test_nodes_of_voxels_against_a_loop(part):
    expected = np.zeros(part.grid.node_shape, bool)
    for i, j, k in np.argwhere(part.solid):
        expected[i : i + 2, j : j + 2, k : k + 2] = True
    np.testing.assert_array_equal(solid_nodes(part.solid), expected)


@settings(deadline=None, max_examples=25)
@given(part=parts())
def test_labels_and_bodies(part):
    one, both = LabelRegion(name="l", labels=(1,)), LabelRegion(name="l", labels=(1, 2))
    body = BodyRegion(name="b", body="odd")
    np.testing.assert_array_equal(one.voxels(part), part.labels == 1)
    np.testing.assert_array_equal(body.voxels(part), part.labels == 1)
    np.testing.assert_array_equal(both.voxels(part), part.solid)
    np.testing.assert_array_equal(both.nodes(part), solid_nodes(part.solid))
    assert all(part.labels[tuple(v)] == 1 for v in one.faces(part).voxel)
    with pytest.raises(InputError, match="no body 'even'"):
        BodyRegion(name="b", body="even").voxels(part)


@settings(deadline=None, max_examples=25)
@given(part=parts(), side=SIDES, depth=st.floats(0, 3))
def test_face_against_a_loop(part, side, depth):
    axis, sense = parse_side(side, "f")
    nodes = part.grid.nodes()
    layers = [at[axis] for at in np.argwhere(part.solid)]
    edge = nodes[axis][max(layers) + 1 if sense > 0 else min(layers)]
    region = FaceRegion(name="f", side=side, depth=depth)
    touched = solid_nodes(part.solid)
    for at in np.ndindex(part.grid.node_shape):
        near = sense * (edge - nodes[axis][at[axis]]) <= depth + 1e-6 * part.grid.spacing[axis]
        assert region.nodes(part)[at] == (near and touched[at])
    faces = region.faces(part)
    assert (faces.axis == axis).all()
    assert (faces.side == sense).all()
    outer = (max if sense > 0 else min)(layers)
    assert {tuple(v) for v in np.argwhere(part.solid) if v[axis] == outer} <= {
        tuple(v) for v in faces.voxel
    }


@settings(deadline=None, max_examples=25)
@given(part=parts(), side=SIDES)
def test_patch_over_everything_is_what_is_seen(part, side):
    axis, sense = parse_side(side, "p")
    patch = PatchRegion(name="p", side=side, outline=((-9, -9), (9, -9), (9, 9), (-9, 9)))
    faces = patch.faces(part)
    towards = (faces.axis == axis) & (faces.side == sense)
    first = {}
    for at in np.argwhere(part.solid):
        column = tuple(np.delete(at, axis))
        if column not in first or sense * at[axis] > sense * first[column][axis]:
            first[column] = at
    assert {tuple(v) for v in faces.voxel[towards]} == {tuple(v) for v in first.values()}
    assert not ((faces.axis == axis) & (faces.side == -sense)).any()
    # each side face is seen over every voxel that stands in front of it
    for voxel, a, s in zip(faces.voxel, faces.axis, faces.side, strict=True):
        before = np.array(voxel)
        before[a] += s
        line = list(before)
        line[axis] = slice(before[axis], None) if sense > 0 else slice(0, before[axis] + 1)
        if all(0 <= c < n for c, n in zip(np.delete(before, axis), np.delete(
            part.grid.shape, axis), strict=True)):  # fmt: skip
            assert not part.solid[tuple(line)].any()
    np.testing.assert_array_equal(np.argwhere(patch.voxels(part)), np.unique(faces.voxel, axis=0))


def test_patch_outline_cuts_a_block():
    part = Part.uniform(VoxelGrid(shape=(10, 8, 3), spacing=(1.0, 1.0, 2.0)), RESIN)
    square = ((2.0, 1.0), (7.0, 1.0), (7.0, 4.0), (2.0, 4.0))
    faces = PatchRegion(name="p", side="z+", outline=square).faces(part)
    assert faces.area.sum() == 15.0
    assert (faces.centre[:, 2] == 6.0).all()
    # an outline across x and z, seen along y: the order is x before z
    faces = PatchRegion(
        name="p", side="y-", outline=((0.2, 0.2), (9.8, 0.2), (9.8, 1.8), (0.2, 1.8))
    ).faces(part)
    assert faces.area.sum() == 20.0
    nodes = PatchRegion(name="p", side="z+", outline=square).nodes(part)
    assert nodes.sum() == 6 * 4
    assert nodes[:, :, :3].sum() == 0
    assert PatchRegion(name="p", side="z-", outline=square).nodes(part)[:, :, 0].sum() == 24


@settings(deadline=None, max_examples=25)
@given(corners=st.lists(st.tuples(COORD, COORD), min_size=3, max_size=7), point=POINT)
def test_outline_turned_round_or_shifted_is_the_same(corners, point):
    at = np.array([point])
    inside = PatchRegion(name="p", side="z+", outline=tuple(corners))._within(at)
    for other in (corners[::-1], corners[1:] + corners[:1]):
        assert PatchRegion(name="p", side="z-", outline=tuple(other))._within(at) == inside


def test_mesh_region_asks_its_mesh():
    part = Part.uniform(VoxelGrid(shape=(4, 4, 4), spacing=(1, 1, 1)), RESIN)
    region = MeshRegion(name="m", inside=lambda p: p[:, 0] < 2)
    assert region.voxels(part).sum() == 32


@pytest.mark.parametrize(
    "make",
    [
        lambda: Box(name="bad", low=(0, 0, 0), high=(1, 0, 1)),
        lambda: Box(name="bad", low=(0, 0, math.nan), high=(1, 1, 1)),
        lambda: Sphere(name="bad", centre=(0, 0, 0), radius=0.0),
        lambda: Sphere(name="bad", centre=(0, 0, 0), radius=math.nan),
        lambda: Cylinder(name="bad", start=(0, 0, 0), end=(0, 0, 0), radius=1.0),
        lambda: Cylinder(name="bad", start=(0, 0, 0), end=(0, 0, 1), radius=1.0, inner_radius=1.0),
        lambda: HalfSpace(name="bad", point=(0, 0, 0), normal=(0, 0, 0)),
        lambda: FaceRegion(name="bad", side="up"),
        lambda: FaceRegion(name="bad", side="z+", depth=-1.0),
        lambda: PatchRegion(name="bad", side="z+", outline=((0, 0), (1, 1))),
        lambda: PatchRegion(name="bad", side="z+", outline=((0, 0), (1, 1), (math.nan, 0))),
    ],
)
def test_refused(make):
    with pytest.raises(InputError, match="bad"):
        make()


def test_face_of_an_empty_part():
    part = Part.uniform(VoxelGrid(shape=(2, 2, 2), spacing=(1, 1, 1)), RESIN)
    empty = part.replace(labels=np.zeros((2, 2, 2), int))
    with pytest.raises(InputError, match="empty"):
        FaceRegion(name="f", side="z+").nodes(empty)


@pytest.mark.parametrize("side", ["z+", "z-"])
def test_a_side_whose_last_layer_is_thin_still_carries_a_load(side):
    """The shape ends 0.3 of a voxel beyond the last full layer, as it mostly does."""
    occupancy = np.full((4, 4, 5), 255, dtype=np.uint8)
    thin = 4 if side == "z+" else 0
    occupancy[:, :, thin] = 76
    part = Part(
        grid=VoxelGrid(shape=(4, 4, 5), spacing=(1.0, 1.0, 1.0)),
        resins=(RESIN,),
        palette=(EMPTY, Blend.pure(RESIN.name)),
        labels=np.ones((4, 4, 5), dtype=np.uint16),
        occupancy=occupancy,
    )
    region = FaceRegion(name="side", side=side)
    faces = region.faces(part)
    assert len(faces) == 16
    assert set(faces.centre[:, 2]) == {4.0 if side == "z+" else 1.0}
    assert region.nodes(part)[:, :, -1 if side == "z+" else 0].all()

"""The voxelisation kernels against slow twins: solid fraction, winding, distance, crossings."""

import os
import subprocess
import sys

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from mesh_twins import (
    convex_fraction,
    crossing_twin,
    distance_to_triangles,
    solid_angle_winding,
)
from scipy.spatial.transform import Rotation

from voxelmat.kernels.crossing import crossing_pairs
from voxelmat.kernels.voxelise import bin_by_plane
from voxelmat.model.grid import VoxelGrid
from voxelmat.shape.solid import box, icosphere, tube
from voxelmat.shape.tree import LEAF, box_tree, disc_tree
from voxelmat.shape.voxelise import voxelise


def turned(mesh, rotation, shift=(0.0, 0.0, 0.0)):
    matrix = np.eye(4)
    matrix[:3, :3] = rotation.as_matrix()
    matrix[:3, 3] = shift
    return mesh.transformed(matrix)


def centres(grid):
    return np.stack(np.meshgrid(*grid.centres(), indexing="ij"), axis=-1).reshape(-1, 3)


angles = st.tuples(*[st.floats(-180, 180)] * 3)
edges = st.tuples(*[st.floats(0.3, 3.0)] * 3)
shifts = st.tuples(*[st.floats(-0.5, 0.5)] * 3)
pitches = st.tuples(*[st.sampled_from([0.5, 0.7, 1.0])] * 3)


@pytest.mark.nojit
@settings(deadline=None, max_examples=15)
@given(edges=edges, angle=angles, shift=shifts, pitch=pitches)
def test_fraction_is_the_exact_volume_of_a_turned_block(edges, angle, shift, pitch):
    block = box(edges, tuple(-e / 2 for e in edges))
    block = turned(block, Rotation.from_euler("xyz", angle, degrees=True), shift)
    grid = VoxelGrid(shape=(6, 5, 4), spacing=pitch, origin=(-2.2, -2.1, -1.3))
    shape = voxelise(block, grid)
    exact = convex_fraction(block, grid)
    # Half a step of rounding to 1/255, and the twin's own tolerance.
    assert np.abs(shape.occupancy / 255 - exact).max() <= 0.5 / 255 + 1e-5


@settings(deadline=None, max_examples=15)
@given(edges=edges, angle=angles, shift=shifts, pitch=pitches)
def test_distance_is_the_least_over_all_triangles(edges, angle, shift, pitch):
    block = box(edges, tuple(-e / 2 for e in edges))
    block = turned(block, Rotation.from_euler("xyz", angle, degrees=True), shift)
    grid = VoxelGrid(shape=(9, 8, 7), spacing=pitch, origin=(-3.1, -3.0, -2.4))
    shape = voxelise(block, grid)
    points = centres(grid)
    exact = distance_to_triangles(block.triangles, points)
    inside = solid_angle_winding(block.triangles, points) > 0.5
    sixteenths = np.where(inside, -1, 1) * exact * 16 / min(pitch)
    got = shape.distance.reshape(-1).astype(float)
    assert np.abs(got - np.clip(sixteenths, -127, 127)).max() <= 0.5 + 1e-6


@pytest.mark.parametrize(
    "mesh", [icosphere(2, 1.7), tube(0.6, 1.8, -1.5, 1.5, 17)], ids=["ball", "tube"]
)
def test_distance_of_fine_meshes(mesh):
    grid = VoxelGrid(shape=(11, 12, 13), spacing=(0.4, 0.35, 0.3), origin=(-2.2, -2.1, -1.95))
    points = centres(grid)
    exact = distance_to_triangles(mesh.triangles, points)
    inside = solid_angle_winding(mesh.triangles, points) > 0.5
    sixteenths = np.clip(np.where(inside, -1, 1) * exact * 16 / 0.3, -127, 127)
    got = voxelise(mesh, grid).distance.reshape(-1).astype(float)
    assert np.abs(got - sixteenths).max() <= 0.5 + 1e-6


THREADS = """
import hashlib
from voxelmat.model.grid import VoxelGrid
from voxelmat.shape.solid import icosphere
from voxelmat.shape.voxelise import voxelise

grid = VoxelGrid(shape=(20, 22, 24), spacing=(0.5, 0.4, 0.4), origin=(-5, -4.4, -4.8))
shape = voxelise(icosphere(3, 4.0, (0.1, 0.2, 0.05)), grid)
data = shape.distance.tobytes("F") + shape.occupancy.tobytes("F")
print(hashlib.sha256(data).hexdigest())
"""


def test_same_bits_on_one_and_two_threads():
    printed = {
        subprocess.run(
            [sys.executable, "-c", THREADS],
            env={**os.environ, "NUMBA_NUM_THREADS": threads},
            capture_output=True,
            text=True,
            check=True,
        ).stdout
        for threads in ("1", "2")
    }
    assert len(printed) == 1
    assert len(printed.pop().strip()) == 64


@pytest.mark.nojit
def test_planes_list_every_triangle_that_touches_them():
    rng = np.random.default_rng(5)
    corners = rng.uniform(-2, 8, (40, 3, 3))
    start, member = bin_by_plane(corners, 6)
    for k in range(6):
        low, high = corners[:, :, 2].min(axis=1), corners[:, :, 2].max(axis=1)
        touch = np.flatnonzero((np.floor(low) <= k) & (np.floor(high) >= k))
        assert (member[start[k] : start[k + 1]] == touch).all()


@pytest.mark.nojit
@pytest.mark.parametrize("count", [1, 2, 3, 7, 33])
def test_trees_hold_their_triangles(count):
    rng = np.random.default_rng(count)
    corners = rng.uniform(-1, 1, (count, 3, 3))
    boxes, discs = box_tree(corners), disc_tree(corners)
    for tree in (boxes, discs):
        assert sorted(tree.order) == list(range(count))
        leaves = (len(tree.nodes) + 1) // 2
        for place, triangle in enumerate(tree.order):
            node = leaves - 1 + place // LEAF
            while True:
                assert _held(tree.nodes[node], corners[triangle])
                if node == 0:
                    break
                node = (node - 1) // 2


def _held(node, points):
    if len(node) == 6:
        return (points >= node[:3]).all() and (points <= node[3:]).all()
    out = points - node[:3]
    along = out @ node[3:6]
    across = np.sqrt(np.maximum((out**2).sum(axis=1) - along**2, 0))
    return (np.abs(along) <= node[6] + 1e-12).all() and (across <= node[7] + 1e-7).all()


@pytest.mark.nojit
@settings(deadline=None, max_examples=10)
@given(seed=st.integers(0, 2**20))
def test_crossings_are_those_of_the_twin(seed):
    rng = np.random.default_rng(seed)
    vertices = rng.uniform(-1, 1, (24, 3))
    faces = rng.permutation(24).reshape(-1, 3).astype(np.int32)
    tree = box_tree(vertices[faces])
    pairs = np.empty((100, 2), dtype=np.int64)
    found, _ = crossing_pairs(
        vertices, faces[tree.order], tree.nodes, tree.order, LEAF, 1e-12, 10_000, pairs
    )
    assert {tuple(sorted(p)) for p in pairs[:found].tolist()} == crossing_twin(vertices, faces)


@pytest.mark.nojit
def test_crossing_search_stops_at_its_budget():
    mesh = icosphere(1)
    tree = box_tree(mesh.triangles)
    pairs = np.empty((4, 2), dtype=np.int64)
    found, looked = crossing_pairs(
        mesh.vertices, mesh.faces[tree.order], tree.nodes, tree.order, LEAF, 1e-12, 7, pairs
    )
    assert (found, looked) == (0, 7)

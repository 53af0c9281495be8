"""Voxelised meshes against exact volumes, counts and distances."""

import importlib.util
import math
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from mesh_twins import solid_angle_winding
from scipy.spatial.transform import Rotation

from voxelmat.errors import Cancelled, InputError
from voxelmat.io.mesh import read_mesh
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.mesh import TriangleMesh
from voxelmat.monitor import CancelFlag
from voxelmat.shape.inside import contains, winding_number
from voxelmat.shape.repair import mend
from voxelmat.shape.shells import part_of, shells_of
from voxelmat.shape.solid import box, cylinder, icosphere, revolve, tube
from voxelmat.shape.voxelise import grid_for, voxelise


def joined(*meshes):
    offsets = np.cumsum([0, *(len(m.vertices) for m in meshes)])
    return TriangleMesh(
        vertices=np.concatenate([m.vertices for m in meshes]),
        faces=np.concatenate([m.faces + o for m, o in zip(meshes, offsets, strict=False)]),
    )


def inside_out(mesh):
    return TriangleMesh(vertices=mesh.vertices, faces=mesh.faces[:, ::-1], name=mesh.name)


def sphere_distance(grid, radius):
    x, y, z = np.meshgrid(*grid.centres(), indexing="ij", sparse=True)
    return np.sqrt(x * x + y * y + z * z) - radius


# Check value L4: centres with x^2 + y^2 + z^2 < (D/2)^2 counted in NumPy for this project,
# with n voxels over the diameter D of a sphere in the middle of the grid.
@pytest.mark.parametrize(("n", "count"), [(16, 2176), (32, 17256), (64, 137376)])
def test_sphere_voxel_counts(n, count):
    h = 2 / n
    grid = VoxelGrid(shape=(n, n, n), spacing=(h, h, h), origin=(-1, -1, -1))
    exact = sphere_distance(grid, 1.0)
    assert (exact < 0).sum() == count
    # Flat faces lie up to 1.5e-5 inside the sphere at this fineness; take the mesh round it.
    ball = icosphere(7, 1 + 4e-5)
    points = np.stack(np.meshgrid(*grid.centres(), indexing="ij"), axis=-1).reshape(-1, 3)
    assert contains(ball, points).sum() == count
    if n <= 32:
        assert (voxelise(ball, grid).distance < 0).sum() == count


def test_icosphere_volume():
    # Check value L4: trimesh's own icosphere of three subdivisions, 4.15274082.
    assert icosphere(3).volume == pytest.approx(4.15274082, abs=5e-9)
    shape = voxelise(icosphere(3), grid_for(icosphere(3), 0.1))
    assert shape.volume == pytest.approx(4.15274082, rel=1e-3)


@pytest.mark.parametrize(
    ("mesh", "volume"),
    [
        (box((3.3, 2.71, 4.04)), 3.3 * 2.71 * 4.04),
        # Area of a regular polygon of n sides, n/2 r^2 sin(2 pi / n): school geometry.
        (cylinder(1.5, -1, 2.2, 24), 3.2 * 12 * 1.5**2 * math.sin(2 * math.pi / 24)),
        (tube(0.7, 1.6, 0, 2.5, 24), 2.5 * 12 * (1.6**2 - 0.7**2) * math.sin(2 * math.pi / 24)),
    ],
    ids=["box", "cylinder", "tube"],
)
@pytest.mark.parametrize("spacing", [(0.1, 0.1, 0.1), (0.08, 0.13, 0.21)])
def test_occupancy_keeps_the_volume(mesh, volume, spacing):
    assert mesh.volume == pytest.approx(volume, rel=1e-12)
    shape = voxelise(mesh, grid_for(mesh, spacing))
    assert shape.volume == pytest.approx(volume, rel=1e-3)


@settings(deadline=None, max_examples=10)
@given(angle=st.tuples(*[st.floats(-180, 180)] * 3), stretch=st.floats(0.5, 2.0))
def test_volume_of_a_turned_grip(angle, stretch):
    grip = revolve([(1.0, 0), (1.6, 2), (1.2, 4), (1.5, 6)], 20)
    matrix = np.eye(4)
    matrix[:3, :3] = Rotation.from_euler("xyz", angle, degrees=True).as_matrix()
    grip = grip.transformed(matrix)
    shape = voxelise(grip, grid_for(grip, (0.25, 0.25 * stretch, 0.25)))
    assert shape.volume == pytest.approx(grip.volume, rel=1e-3)


def test_distance_of_a_sphere():
    ball = icosphere(6, 5.0)
    grid = grid_for(ball, (0.5, 0.25, 0.4), margin_voxels=9)
    exact = np.clip(sphere_distance(grid, 5.0) * 16 / 0.25, -127, 127)
    # Half a sixteenth of rounding; the facets lie up to 5e-4 mm = 0.03 sixteenths inside.
    assert np.abs(voxelise(ball, grid).distance - exact).max() <= 0.55


def test_arrays_are_indexed_x_y_z_with_x_fastest():
    shape = voxelise(box((4, 2, 1)), grid_for(box((4, 2, 1)), 0.5, margin_voxels=0))
    assert shape.occupancy.shape == (8, 4, 2)
    for array in (shape.occupancy, shape.distance):
        assert array.flags.f_contiguous
        assert not array.flags.writeable
    assert (shape.occupancy == 255).all()
    assert shape.distance[0, 1, 0] == -8


def test_grid_may_be_smaller_or_elsewhere():
    block = box((10, 10, 10))
    grid = VoxelGrid(shape=(4, 4, 4), spacing=(1, 1, 1), origin=(8, 3, 3))
    shape = voxelise(block, grid)
    assert (shape.occupancy[:2] == 255).all()
    assert (shape.occupancy[2:] == 0).all()
    far = VoxelGrid(shape=(2, 2, 2), spacing=(1, 1, 1), origin=(30, 0, 0))
    shape = voxelise(block, far)
    assert not shape.occupancy.any()
    assert (shape.distance == 127).all()
    left = VoxelGrid(shape=(3, 2, 2), spacing=(1, 1, 1), origin=(-9, 4, 4))
    assert not voxelise(block, left).occupancy.any()


def test_faces_through_ray_and_voxel_corners():
    # Every corner of this block lies on a voxel centre, so that rays meet edges and corners.
    block = box((4, 4, 4), (0.5, 0.5, 0.5))
    grid = VoxelGrid(shape=(5, 5, 5), spacing=(1, 1, 1))
    shape = voxelise(block, grid)
    assert shape.volume == pytest.approx(64, rel=3e-3)  # halves, quarters and eighths of 255
    assert (shape.distance[1:4, 1:4, 1:4] < 0).all()
    rim = np.ones(grid.shape, dtype=bool)
    rim[1:4, 1:4, 1:4] = False
    assert (shape.distance[rim] == 0).all()


def test_cavity_is_empty():
    body = joined(icosphere(3, 10), inside_out(icosphere(2, 4)))
    shape = voxelise(body, grid_for(body, 0.5))
    assert shape.volume == pytest.approx(icosphere(3, 10).volume - icosphere(2, 4).volume, rel=1e-3)
    middle = tuple(n // 2 for n in shape.grid.shape)
    assert shape.occupancy[middle] == 0
    assert shape.distance[middle] > 100


def test_overlapping_shells_become_one_body():
    a, b = icosphere(4, 10), icosphere(4, 10, (12, 0.1, 0.2))
    shape = voxelise(joined(a, b), grid_for(joined(a, b), 0.5))
    d = math.sqrt(12**2 + 0.1**2 + 0.2**2)
    # Lens of two equal spheres, pi (4 r + d) (2 r - d)^2 / 12: Weisstein, MathWorld,
    # "Sphere-Sphere Intersection"; from memory.
    lens = math.pi * (4 * 10 + d) * (2 * 10 - d) ** 2 / 12
    assert shape.volume == pytest.approx(2 * 4 / 3 * math.pi * 1000 - lens, rel=4e-3)
    assert "overlap" in shape.cautions[0]
    seam = shape.grid.index_of((6.0, 0.0, 0.0))
    assert (shape.distance[seam[0] - 2 : seam[0] + 3, seam[1], seam[2]] <= -8).all()


def test_nested_outward_shell_changes_nothing():
    outer = icosphere(3, 10)
    shape = voxelise(joined(outer, icosphere(2, 4)), grid_for(outer, 0.5))
    assert shape.volume == pytest.approx(outer.volume, rel=1e-3)
    middle = tuple(n // 2 for n in shape.grid.shape)
    assert shape.distance[middle] == -127


def test_open_and_inside_out_meshes_are_refused():
    ball = icosphere(2, 3)
    grid = grid_for(ball, 0.5)
    opened = TriangleMesh(vertices=ball.vertices, faces=ball.faces[1:], name="pad")
    with pytest.raises(InputError, match="'pad' is not closed"):
        voxelise(opened, grid)
    with pytest.raises(InputError, match=r"inside out round \(.*\) mm"):
        voxelise(inside_out(ball), grid)


def test_mesh_of_another_unit_is_told():
    block = box((1e7, 1e7, 1e7), (-5e6, -5e6, -5e6))
    with pytest.raises(InputError, match="Check the unit"):
        voxelise(block, VoxelGrid(shape=(4, 4, 4), spacing=(1e-3, 1e-3, 1e-3)))


def test_shells_that_touch_leave_no_wall():
    # The common wall lies on voxel centres, where the distance to it is 0.
    two = joined(box((4.25, 4, 4)), box((3.75, 4, 4), (4.25, 0, 0)))
    shape = voxelise(two, grid_for(two, 0.5))
    assert (shape.occupancy[1:17, 1:9, 1:9] == 255).all()
    assert (shape.distance[1:17, 1:9, 1:9] <= -8).all()
    assert "touch" in shape.cautions[0]
    apart = joined(box((4, 4, 4)), box((4, 4, 4), (5, 0, 0)))
    assert voxelise(apart, grid_for(apart, 0.5)).cautions == ()


def test_a_flat_sheet_has_no_volume():
    sheet = TriangleMesh(vertices=np.eye(3), faces=[[0, 1, 2], [0, 2, 1]])
    shape = voxelise(sheet, grid_for(sheet, 0.25))
    assert not shape.occupancy.any()
    line = TriangleMesh(vertices=np.diag([1.0, 0, 0]), faces=[[0, 1, 2], [0, 2, 1]])
    with pytest.raises(InputError, match="no face with an area"):
        voxelise(line, VoxelGrid(shape=(2, 2, 2), spacing=(1, 1, 1)))


def test_cancelling_stops_the_work():
    flag = CancelFlag()
    flag.cancel()
    with pytest.raises(Cancelled):
        voxelise(icosphere(1), grid_for(icosphere(1), 0.5), monitor=flag)


def test_grid_is_aligned_to_the_low_corner():
    grid = grid_for([box((1, 1, 1)), box((1, 2, 1), (2, 0, 0.3))], (0.5, 0.5, 0.25))
    assert grid.origin == (-0.5, -0.5, -0.25)
    assert grid.shape == (8, 6, 8)
    assert grid_for(box((0.3, 0.3, 0.3)), 0.1, margin_voxels=0).shape == (3, 3, 3)
    for wrong in (0, -1, math.nan):
        with pytest.raises(InputError, match="Spacing"):
            grid_for(box((1, 1, 1)), wrong)
    with pytest.raises(InputError, match="margin"):
        grid_for(box((1, 1, 1)), 1, margin_voxels=-1)
    with pytest.raises(InputError, match="at least one mesh"):
        grid_for([], 1)


@pytest.mark.nojit
@settings(deadline=None, max_examples=15)
@given(seed=st.integers(0, 2**20))
def test_winding_number_is_the_solid_angle(seed):
    rng = np.random.default_rng(seed)
    mesh = joined(icosphere(1, 2.0), box((3, 3, 3), tuple(rng.uniform(-2, 0, 3))))
    points = rng.uniform(-3, 3, (60, 3))
    twin = solid_angle_winding(mesh.triangles, points)
    assert (winding_number(mesh, points) == np.rint(twin)).all()


@pytest.mark.nojit
def test_points_are_checked():
    with pytest.raises(InputError, match="x, y, z"):
        contains(box((1, 1, 1)), [[0.5, 0.5]])
    with pytest.raises(InputError, match="finite"):
        contains(box((1, 1, 1)), [[0.5, 0.5, math.nan]])
    assert contains(box((1, 1, 1)), np.empty((0, 3))).shape == (0,)


def test_real_mesh_of_overlapping_shells():
    # Check list, section 12: the ant mesh that comes with pyvista is closed, volume 482.144.
    # It is fifteen shells that overlap a little, so the joined body is smaller.
    found = importlib.util.find_spec("pyvista")
    if found is None or found.origin is None:
        pytest.skip("pyvista is not installed")
    (mesh,) = read_mesh(Path(found.origin).parent / "examples" / "ant.ply", "mm")
    mesh, told = mend(mesh)
    assert mesh.volume == pytest.approx(482.144, abs=5e-4)
    assert "overlap" in told[0]
    grid = grid_for(mesh, 0.5)
    shells = [voxelise(part_of(mesh, faces), grid) for faces in shells_of(mesh)]
    assert len(shells) == 15
    assert sum(s.volume for s in shells) == pytest.approx(482.144, rel=1e-3)
    whole = voxelise(mesh, grid)
    assert 0.99 * 482.144 < whole.volume < 482.144
    every = np.max([s.occupancy for s in shells], axis=0)
    assert (whole.occupancy >= every).all()
    assert (whole.distance <= np.min([s.distance for s in shells], axis=0)).all()


def test_one_shell_that_crosses_itself_is_told():
    # A closed coil of two turns in one plane winds twice round its middle.
    turn = 4 * np.pi * np.arange(32) / 32
    ring = 10 + 2 * np.sin(turn / 2)
    loop = np.column_stack([ring * np.cos(turn), ring * np.sin(turn)])
    n = len(loop)
    here, on = np.arange(n), (np.arange(n) + 1) % n
    vertices = np.vstack(
        [
            np.column_stack([loop, np.zeros(n)]),
            np.column_stack([loop, np.full(n, 4.0)]),
            [[0, 0, 0], [0, 0, 4]],
        ]
    )
    faces = np.vstack(
        [
            np.column_stack([here, on, on + n]),
            np.column_stack([here, on + n, here + n]),
            np.column_stack([on, here, np.full(n, 2 * n)]),
            np.column_stack([here + n, on + n, np.full(n, 2 * n + 1)]),
        ]
    )
    coil = TriangleMesh(vertices=vertices, faces=faces, name="coil")
    shape = voxelise(coil, grid_for(coil, 1.0))
    assert "'coil' crosses itself" in shape.cautions[0]
    assert (shape.distance[shape.occupancy == 255] <= -8).all()
    middle = shape.grid.index_of((0.1, 0.1, 2.1))
    assert shape.occupancy[middle] == 255

"""A mesh voxelised into a store equals the mesh voxelised whole."""

import numpy as np
import pytest

from voxelmat.errors import InputError
from voxelmat.io.bigpart import open_big_part
from voxelmat.io.bigpart_write import SLAB
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.material import Constant, Material
from voxelmat.model.mesh import TriangleMesh
from voxelmat.shape import to_store
from voxelmat.shape.solid import box, icosphere
from voxelmat.shape.to_store import voxelise_to_store
from voxelmat.shape.voxelise import voxelise

RESIN = Material(  # invented
    name="made-up",
    kind="rigid",
    E=Constant(value=1000.0, unit="MPa"),
    nu=Constant(value=0.4),
    density=Constant(value=1.1e-9, unit="tonne/mm3"),
)


def joined():
    """Two overlapping shells in one mesh."""
    one, two = box((6.0, 5.0, 4.0), (0.3, 0.2, 2.1)), box((3.0, 2.0, 9.0), (0.1, 0.4, 5.3))
    vertices = np.concatenate([one.vertices, two.vertices])
    faces = np.concatenate([one.faces, np.asarray(two.faces) + len(one.vertices)])
    return TriangleMesh(vertices=vertices, faces=faces, name="joined")


MESHES = {"ball": icosphere(2, 3.1, (0.2, -0.1, 3.3)), "joined": joined()}


@pytest.mark.parametrize("name", MESHES)
@pytest.mark.parametrize("kind", ["zarr", "maps"])
def test_slabs_equal_the_whole(tmp_path, monkeypatch, name, kind):
    mesh = MESHES[name]
    grid = VoxelGrid(shape=(15, 14, 27), spacing=(0.5, 0.5, 0.4), origin=(-3.7, -3.4, -0.6))
    monkeypatch.setattr(to_store, "_MOST_VOXELS", 15 * 14 * 2 * SLAB)
    voxelise_to_store(mesh, grid, RESIN, tmp_path / "s", kind=kind)
    stored = open_big_part(tmp_path / "s").load()
    whole = voxelise(mesh, grid)
    assert np.array_equal(stored.distance, whole.distance)
    assert np.array_equal(stored.occupancy, whole.occupancy)
    assert np.array_equal(stored.labels > 0, whole.occupancy > 0)
    assert stored.name == mesh.name


def test_an_open_mesh_leaves_nothing(tmp_path):
    mesh = MESHES["ball"]
    mesh = TriangleMesh(vertices=mesh.vertices, faces=np.asarray(mesh.faces)[1:], name="open")
    grid = VoxelGrid(shape=(9, 9, 9), spacing=(1.0, 1.0, 1.0), origin=(-4.0, -4.0, -1.0))
    with pytest.raises(InputError, match="not closed"):
        voxelise_to_store(mesh, grid, RESIN, tmp_path / "s")
    assert not (tmp_path / "s").exists()

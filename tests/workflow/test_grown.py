"""A face of a mesh that was clicked and grown: areas by formula, revisions, bad seeds."""

import numpy as np
import pytest
import trimesh

from voxelmat.errors import InputError
from voxelmat.io.mesh import write_stl
from voxelmat.model.mesh import TriangleMesh
from voxelmat.shape.grow import grow
from voxelmat.shape.solid import box
from voxelmat.workflow.build import build

REGION = """
[[region]]
name = "clicked"
kind = "grown"
body = "pad"
seed_mm = [6.0, 4.0, 6.0]
angle_deg = 20.0
area_mm2 = 96.0
"""


def _mesh(shape):
    return TriangleMesh(vertices=shape.vertices, faces=shape.faces, name="made up")


@pytest.mark.parametrize("soup", [False, True])
def test_a_face_of_a_box_and_the_side_of_a_cylinder(soup):
    """Areas by formula: a face of a box, the wall of a cylinder, its end."""
    made = trimesh.creation.box((4.0, 6.0, 8.0)), trimesh.creation.cylinder(5.0, 20.0, sections=90)
    if soup:  # every triangle with corners of its own, as an STL file has them
        for shape in made:
            shape.unmerge_vertices()
    block, rod = map(_mesh, made)
    assert grow(block, (1.0, 2.0, 4.0), 10).area_mm2 == pytest.approx(24.0)
    assert grow(block, (1.0, 2.0, 4.0), 95).area_mm2 == pytest.approx(2 * (24 + 32 + 48))
    wall = grow(rod, (5.0, 0.0, 3.0), 5.0)
    assert wall.area_mm2 == pytest.approx(2 * np.pi * 5 * 20, rel=1e-3)
    end = grow(rod, (0.5, 0.5, 10.0), 5.0)
    assert end.area_mm2 == pytest.approx(np.pi * 25, rel=2e-3)
    assert not (wall.chosen & end.chosen).any()
    with pytest.raises(InputError, match="no surface"):
        grow(rod, (0.0, 0.0, 0.0), 5.0)
    with pytest.raises(InputError, match="between 0 and 180"):
        grow(rod, (5.0, 0.0, 0.0), 200.0)


def test_the_region_is_the_side_of_the_part(design):
    design.write_text(design.read_text() + REGION)
    built = build(design)
    region, top = built.regions["clicked"], built.regions["top"]
    assert region.faces(built.part).area.sum() == pytest.approx(96.0)
    np.testing.assert_array_equal(region.nodes(built.part), top.nodes(built.part))
    assert (region.voxels(built.part) <= top.voxels(built.part)).all()


def test_a_revised_mesh_keeps_or_refuses_the_region(design):
    design.write_text(design.read_text() + REGION)
    write_stl(box((12.0, 8.1, 4.0), (0.0, 0.0, 2.0), name="pad"), design.parent / "pad.stl")
    build(design)  # 1 % more area: found again
    write_stl(box((12.0, 9.0, 4.0), (0.0, 0.0, 2.0), name="pad"), design.parent / "pad.stl")
    with pytest.raises(InputError, match="has 108 mm2") as caught:
        build(design)
    assert "region[2]" in str(caught.value)
    write_stl(box((12.0, 8.0, 3.0), (0.0, 0.0, 2.0), name="pad"), design.parent / "pad.stl")
    with pytest.raises(InputError, match="no surface"):
        build(design)


def test_a_body_that_is_not_there_is_named(design):
    design.write_text(design.read_text() + REGION.replace('"pad"', '"lid"'))
    with pytest.raises(InputError, match="lid"):
        build(design)

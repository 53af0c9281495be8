"""Design planes made one by one equal those of the whole design, in any orientation."""

import numpy as np
import pytest
from print_twins import layered_part, nearest_printed

from voxelmat.printing import planes as planes_module
from voxelmat.printing.place import place
from voxelmat.printing.planes import DesignPlanes, PlaneFile
from voxelmat.printing.profile import load_profile
from voxelmat.printing.support import column_support, fill_columns, outline_box, outline_field

TURNS = [(), ("x 90",), ("y -90", "z 90"), ("x 180",)]


def _raster(part, turns):
    field = outline_field(part)
    return place(outline_box(part, field), load_profile("invented-standard"), turns)


@pytest.mark.parametrize("turns", TURNS)
@pytest.mark.parametrize("outline", ["distance", "occupancy", "voxels"])
@pytest.mark.parametrize("block", [1, 4 * 7 * 6 * 2, 1 << 20])
def test_planes_equal_the_whole_design(monkeypatch, turns, outline, block):
    part = layered_part(outline)
    raster = _raster(part, turns)
    monkeypatch.setattr(planes_module, "BLOCK_BYTES", block)
    planes = DesignPlanes(part, raster, support=fill_columns)
    field = raster.to_image(outline_field(part))
    both = column_support(field)
    labels = nearest_printed(raster.to_image(part.labels), part.printed_labels())
    up = planes.cursor()
    part_way = planes.cursor(2, 4)
    assert planes.shape == field.shape
    for k in range(len(field)):
        plane = up.plane(k)
        assert np.array_equal(plane.labels, labels[k])
        assert np.array_equal(plane.outlines, [field[k], both[k]])
    assert np.array_equal(part_way.plane(2).labels, labels[2])
    assert np.array_equal(part_way.plane(3).outlines[0], field[3])


@pytest.mark.parametrize("shape", [(1, 4, 5), (4, 1, 5), (3, 4, 1), (1, 1, 1)])
def test_an_axis_of_one_voxel_is_doubled(shape):
    part = layered_part("voxels", shape=shape)
    planes = DesignPlanes(part, _raster(part, ()))
    cursor = planes.cursor()
    for k in range(2):
        plane = cursor.plane(k)
        assert plane.labels.shape == planes.shape[1:]
        true = part.labels[:, :, min(k, shape[2] - 1)].T[::-1]
        assert np.array_equal(np.unique(plane.labels), np.unique(true))
        assert plane.outlines.shape == (1, *planes.shape[1:])


def test_a_large_support_field_goes_to_a_file_and_is_shared(monkeypatch, tmp_path):
    part = layered_part("distance")
    raster = _raster(part, ("x 90",))
    in_memory = DesignPlanes(part, raster, support=fill_columns)
    monkeypatch.setattr(planes_module, "SUPPORT_IN_MEMORY", 10)
    on_disk = DesignPlanes(part, raster, support=fill_columns)
    named = DesignPlanes(part, raster, support=fill_columns, support_file=tmp_path / "field")

    def never(outline, field):
        raise AssertionError("the file was there")

    shared = DesignPlanes(part, raster, support=never, support_file=tmp_path / "field")
    for k in range(in_memory.shape[0]):
        wanted = in_memory.cursor().plane(k).outlines
        for other in (on_disk, named, shared):
            assert np.array_equal(other.cursor().plane(k).outlines, wanted)


def test_a_plane_file_reads_what_was_written(tmp_path):
    random = np.random.default_rng(3)
    field = random.integers(-127, 128, (5, 3, 4)).astype(np.int8)
    rows = PlaneFile(tmp_path / "f", field.shape)
    for k in (4, 0, 2, 3, 1):
        rows[k] = field[k]
    again = PlaneFile(tmp_path / "f", field.shape)
    assert all(np.array_equal(again[k], field[k]) for k in range(5))

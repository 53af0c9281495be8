"""Build orientation, position and raster: every site maps to the right voxel and back."""

import itertools
from fractions import Fraction

import numpy as np
import pytest

from voxelmat.errors import InputError
from voxelmat.model.grid import VoxelGrid
from voxelmat.printing.place import place, rotation_matrix
from voxelmat.printing.profile import load_profile, shipped_profiles
from voxelmat.printing.raster import Raster

GRID = VoxelGrid(shape=(3, 4, 5), spacing=(0.3, 0.4, 0.5), origin=(1.0, 2.0, 3.0))
BOX = (GRID.origin, GRID.upper)


def test_turns_are_right_handed_and_close():
    for turns in itertools.product(["x 90", "y -90", "z 180", "x 0"], repeat=3):
        turn = rotation_matrix(turns)
        assert round(np.linalg.det(turn)) == 1
        assert np.array_equal(turn @ turn.T, np.eye(3))
    assert np.array_equal(rotation_matrix(["y 90"] * 4), np.eye(3))
    assert (rotation_matrix("x 90") @ [0, 1, 0]).tolist() == [0, 0, 1]


@pytest.mark.parametrize("turn", ["x 45", "w 90", "90", "x", "x 90.5"])
def test_other_angles_are_refused(turn):
    with pytest.raises(InputError, match="multiple of 90"):
        rotation_matrix([turn])


@pytest.mark.parametrize("profile", shipped_profiles())
@pytest.mark.parametrize("turns", [(), ("x 90",), ("z 90", "y 180"), ("y -90", "z 270")])
def test_image_and_part_agree_at_every_probed_site(profile, turns):
    raster = place(BOX, load_profile(profile), turns)
    field = np.arange(60).reshape(GRID.shape)
    image = raster.to_image(field)
    assert np.array_equal(raster.to_part(image), field)
    index = [raster.image_index(GRID, axis) for axis in range(3)]
    random = np.random.default_rng(1)
    hits = 0
    for _ in range(200):
        layer, row, column = (int(random.integers(0, n)) for n in raster.image_shape)
        marked = np.zeros(raster.image_shape[1:], bool)
        marked[row, column] = True
        ((ix, iy),) = np.argwhere(raster.from_image(marked))
        point = raster.site_to_part((ix, iy, layer))
        assert raster.pixel_to_part(layer, row, column) == point
        voxel = GRID.index_of(point)
        if voxel is None:  # the last site may lie past the outline by less than a pitch
            continue
        hits += 1
        at = (index[0][layer], index[1][row], index[2][column])
        assert image[tuple(np.rint(at).astype(int))] == field[voxel]
    assert hits > 150
    assert Raster.from_dict(raster.as_dict()) == raster


def test_position_and_pitch_are_exact_far_from_the_corner():
    raster = place(BOX, load_profile("invented-standard"), position=(400.0, 300.0))
    assert raster.offset[0] == int(Fraction(400) / Fraction(127, 3000))
    x, y, z = raster.site_to_part((0, 0, 0))
    # Half a pitch from the low corner of the part, whatever the position.
    half = [float(p) / 2 for p in raster.pitch]
    assert (x, y, z) == pytest.approx([o + h for o, h in zip(GRID.origin, half, strict=True)])


def test_a_tray_that_is_too_small_is_refused_with_the_numbers():
    box = ((0.0, 0.0, 0.0), (130.0, 20.0, 10.0))
    profile = load_profile("invented-coarse")
    with pytest.raises(InputError, match=r"130 x 20 x 10 mm.*116 x 76 x 60 mm"):
        place(box, profile)
    with pytest.raises(InputError, match="x must lie in"):
        place(((0, 0, 0), (20.0, 20.0, 5.0)), profile, position=(110.0, 10.0))
    with pytest.raises(InputError):
        place(((0, 0, 0), (20.0, 20.0, 5.0)), profile, position=(float("nan"), 10.0))


def test_a_part_of_whole_sites_gets_no_extra_one():
    raster = place(((0, 0, 0), (2.54, 2.54, 0.3)), load_profile("invented-standard"))
    assert raster.shape == (60, 30, 10)

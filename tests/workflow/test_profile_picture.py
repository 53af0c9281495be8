"""The picture of a profile: its first pixel lies where the images begin, whatever the orders."""

import io
import json

import numpy as np
import pytest
from PIL import Image

from voxelmat.cli import main
from voxelmat.model.image import ImageLayout
from voxelmat.model.profile import ORIGIN_CORNERS, PrintProfile
from voxelmat.printing.compose import tray_window
from voxelmat.printing.imageorder import ImageOrder
from voxelmat.printing.profile import load_profile, shipped_profiles
from voxelmat.printing.raster import Raster
from voxelmat.workflow.report_profile import profile_picture, profile_rows

COARSE = load_profile("invented-coarse")


def whole_tray(profile):
    sites = profile.tray_sites
    raster = Raster(
        pitch=profile.pitch, shape=(sites[0], sites[1], 1), offset=(0, 0, 0),
        rotation=((1, 0, 0), (0, 1, 0), (0, 0, 1)), translation=(0.0, 0.0, 0.0),
        tray_sites=sites[:2], origin_corner=profile.origin_corner,
        row_direction=profile.row_direction,
    )  # fmt: skip
    return tray_window([raster], profile)


def first_pixel_on_tray(profile):
    """Where on the tray, mm, the first pixel of a file of the whole tray lies."""
    window = whole_tray(profile)
    order = ImageOrder(window, profile)
    file = np.zeros((1, order.height, (order.width + 7) // 8), dtype=np.uint8)
    file[0, 0, 0] = 0x80
    bits = order.from_file(file, "the file")
    row, column = np.argwhere(np.unpackbits(bits[0], axis=1))[0]
    return window.pixel_to_tray(0, int(row), int(column))[:2]


@pytest.mark.parametrize("corner", ORIGIN_CORNERS)
@pytest.mark.parametrize("rows", ["x", "y"])
@pytest.mark.parametrize("order", ["down", "up"])
def test_the_marker_lies_at_the_first_pixel_of_a_file(corner, rows, order):
    profile = COARSE.replace(
        origin_corner=corner, row_direction=rows, image=ImageLayout(row_order=order)
    )  # fmt: skip
    picture = np.asarray(Image.open(io.BytesIO(profile_picture(profile).png)).convert("RGB"))
    wanted = np.abs(picture.astype(int) - [0xD5, 0x5E, 0x00]).max(axis=2) < 40
    # The filled square is the only large blot of its colour: arrows and the ring are thin.
    side = 9
    sums = np.pad(wanted.cumsum(axis=0).cumsum(axis=1), ((1, 0), (1, 0)))
    blot = sums[side:, side:] - sums[:-side, side:] - sums[side:, :-side] + sums[:-side, :-side]
    assert blot.max() == side * side
    y, x = np.argwhere(blot == blot.max()).mean(axis=0) + side / 2
    frame = np.argwhere(np.abs(picture.astype(int) - 0xBB).max(axis=2) < 3)
    (top, left), (bottom, right) = frame.min(axis=0), frame.max(axis=0)
    place = first_pixel_on_tray(profile)
    assert (x > (left + right) / 2) == (place[0] > profile.tray_size[0] / 2)
    assert (y < (top + bottom) / 2) == (place[1] > profile.tray_size[1] / 2)


@pytest.mark.parametrize("name", shipped_profiles())
def test_words_and_picture_of_shipped_profiles(name):
    profile = load_profile(name)
    words = dict(profile_rows(profile))
    assert words["origin of images"].startswith(profile.origin_corner)
    assert profile.name in profile_picture(profile).caption
    assert f"follow {profile.row_direction}" in profile_picture(profile).alt


def test_the_shell_command(tmp_path, capsys):
    assert main(["profile", "invented-fine", "--picture", str(tmp_path / "p.png")]) == 0
    assert "21.167 (127/6) µm" in capsys.readouterr().out  # check L1: 25400 / 1200 um
    with Image.open(tmp_path / "p.png") as image:
        assert image.width > 800
    assert main(["profile", "invented-fine", "--json"]) == 0
    data = json.loads(capsys.readouterr().out)["profile"]
    assert PrintProfile.from_dict(data) == load_profile("invented-fine")
    assert main(["profile", "invented-fin"]) == 3
    assert "Did you mean 'invented-fine'" in capsys.readouterr().err
    assert main(["profile", "invented-fine", "--picture", str(tmp_path / "no" / "p.png")]) == 4
    zero = tmp_path / "zero.toml"
    zero.write_text(
        'format = 1\nname = "z"\n[pitch]\nx_um = 0\ny_um = 1\nlayer_um = 1\n'
        "[tray]\nsize_mm = [9, 9, 9]\n[channels]\na = ''\n"
    )
    assert main(["profile", str(zero)]) == 3
    assert "pitch.x_um" in capsys.readouterr().err

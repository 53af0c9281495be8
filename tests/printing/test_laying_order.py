"""Which resin the thresholds lay first: by stiffness, and it is the one with the least noise."""

import numpy as np
import pytest
from print_twins import HARD, MID, SOFT, layered_part, resin

from voxelmat.errors import InputError
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.halftone import Halftone
from voxelmat.model.part import Part
from voxelmat.printing.halftone import Slicer
from voxelmat.printing.order import halftone_method, laying_order
from voxelmat.printing.place import place
from voxelmat.printing.profile import load_profile
from voxelmat.printing.stack import write_stack
from voxelmat.printing.support import outline_box

CHANNELS = ("soft", "hard", "mid")


def blended(*fractions, sites=100):
    """A block of one blend of soft, hard and mid, and its raster of about `sites` cubed."""
    profile = load_profile("invented-standard")
    pitch = [float(p) for p in (profile.pitch_x, profile.pitch_y, profile.layer)]
    grid = VoxelGrid(shape=(2, 2, 2), spacing=tuple(sites / 2 * p for p in pitch))
    blend = Blend.of(dict(zip(CHANNELS, fractions, strict=True)))
    part = Part(
        grid=grid,
        resins=(HARD, SOFT, MID),
        palette=(EMPTY, blend),
        labels=np.ones((2, 2, 2), np.uint16),
    )
    return part, place(outline_box(part), profile)


def window_rms(material, *, order, size=8):
    """Root mean square over inner windows of the error of one material's share of a third."""
    part, raster = blended(1, 1, 1)
    slicer = Slicer(part, raster, CHANNELS, support=False, seed=2, halftone=Halftone(order=order))
    block = np.stack([s.copy() for s in slicer.sites(0, raster.image_shape[0])])[3:99, 3:99, 3:99]
    share = (block == CHANNELS.index(material) + 1).reshape((96 // size, size) * 3)
    return np.sqrt(((share.mean(axis=(1, 3, 5)) - 1 / 3) ** 2).mean())


def test_the_stiffest_goes_first_and_the_softest_last():
    materials = (SOFT, HARD, MID, resin("firm", 800.0))
    names = ("soft", "firm", "mid", "hard")
    assert laying_order(materials, names, Halftone()) == ("hard", "firm", "mid", "soft")
    assert laying_order(materials, names, Halftone(order="channels")) == names
    asked = ("mid", "hard", "soft", "firm")
    assert laying_order(materials, names, Halftone(order=asked)) == asked


@pytest.mark.parametrize("size", [8, 16])
def test_the_stiff_resin_has_less_noise_than_in_the_middle(size):
    chosen = window_rms("hard", order="stiffness", size=size)
    middle = window_rms("hard", order=("soft", "hard", "mid"), size=size)
    assert chosen < 0.97 * middle


def test_noise_of_the_log_modulus_is_least_in_the_order_of_stiffness():
    # By the logarithmic mixing law log E = sum of f log E (Lichtenecker 1926, from memory), so
    # its noise in a window follows from the shares.
    part, raster = blended(1, 1, 1)
    log = np.log([SOFT.E.value, HARD.E.value, MID.E.value])
    noise = {}
    for order in ("stiffness", ("soft", "hard", "mid"), ("hard", "soft", "mid")):
        slicer = Slicer(
            part, raster, CHANNELS, support=False, seed=2, halftone=Halftone(order=order)
        )
        block = np.stack([s.copy() for s in slicer.sites(0, raster.image_shape[0])])
        value = log[block[3:99, 3:99, 3:99].astype(int) - 1].reshape((12, 8) * 3)
        noise[order] = value.mean(axis=(1, 3, 5)).std()
    assert noise["stiffness"] == min(noise.values())


def test_order_does_not_move_the_channels():
    # The whole is the same for every order: shares right, each channel its own resin.
    part, raster = blended(1, 2, 3, sites=64)
    for order in ("stiffness", "channels", ("mid", "soft", "hard")):
        slicer = Slicer(
            part, raster, CHANNELS, support=False, seed=2, halftone=Halftone(order=order)
        )
        block = np.stack([s.copy() for s in slicer.sites(0, raster.image_shape[0])])
        share = np.bincount(block[:, 1:-1, 1:63].ravel(), minlength=4)[1:]
        assert share / share.sum() == pytest.approx([1 / 6, 1 / 3, 1 / 2], abs=3e-3)


def test_the_manifest_says_the_order_and_why(tmp_path):
    part = layered_part("distance", shape=(7, 6, 5))
    profile = load_profile("invented-standard")
    profile = profile.replace(layer=profile.layer * 4)
    stack = write_stack(part, profile, tmp_path / "a")
    method = stack.manifest["method"]
    assert method["order"] == ["hard", "mid", "soft"]
    assert "stiffest" in method["order_reason"]
    assert method["settings"] == Halftone().as_dict()
    stated = Halftone(order=("soft", "hard", "mid"), interface_width_mm={("hard", "soft"): 0.3})
    other = write_stack(part, profile, tmp_path / "b", halftone=stated).manifest
    assert other["method"]["order_reason"] == "as asked"
    assert "rise from 0 to 1" in other["method"]["interfaces"]
    assert other["job"] != stack.manifest["job"]


def test_each_method_is_told_apart():
    told = [
        halftone_method((HARD, SOFT), ("hard", "soft"), Halftone(method=m))
        for m in ("blue noise", "error diffusion", "hash noise")
    ]
    assert len({t["halftone"] for t in told}) == 3
    assert ["mask_sha256" in t for t in told] == [True, False, False]
    assert ["order" in t for t in told] == [True, False, True]


@pytest.mark.parametrize("order", [("hard",), ("hard", "soft", "gold"), ("hard", "hard", "soft")])
def test_an_order_that_does_not_name_each_resin_once(order):
    with pytest.raises(InputError, match="names each printed resin once") as caught:
        laying_order((HARD, SOFT, MID), CHANNELS, Halftone(order=order))
    assert caught.value.key == "order"


@pytest.mark.parametrize("options", [{"method": "dots"}, {"order": "colour"}])
def test_unknown_choices(options):
    with pytest.raises(InputError, match="one of"):
        Halftone(**options)

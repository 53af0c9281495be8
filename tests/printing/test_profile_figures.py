"""Image layout, smallest sizes, bias and process figures of a profile; its schema agrees."""

import dataclasses
import json

import jsonschema
import pytest
from print_twins import layered_part

from voxelmat.errors import InputError
from voxelmat.io.schema import load_schema
from voxelmat.model.minimum_sizes import MinimumSizes
from voxelmat.model.process import ProcessFigures
from voxelmat.model.profile import PrintProfile
from voxelmat.printing.job import placed
from voxelmat.printing.profile import load_profile, shipped_profiles

STANDARD = load_profile("invented-standard")


def data(**changes):
    plain = json.loads(json.dumps(STANDARD.as_dict()))
    for key, value in changes.items():
        table, _, name = key.partition("__")
        if name:
            plain[table][name] = value
        else:
            plain[table] = value
    return plain


def refused_by_schema(plain):
    return bool(list(jsonschema.Draft202012Validator(load_schema("profile")).iter_errors(plain)))


@pytest.mark.parametrize("name", shipped_profiles())
def test_shipped_profiles_agree_with_the_schema(name):
    assert not refused_by_schema(json.loads(json.dumps(load_profile(name).as_dict())))


@pytest.mark.parametrize(
    ("changes", "key"),
    [
        ({"pitch__x_um": 0}, "pitch.x_um"),
        ({"bias_mm": [0.1, 0.1]}, "bias_mm"),
        ({"bias_mm": [0.1, 0.1, 11]}, "bias_mm"),
        ({"tray__usable_mm": [0, 0, 10]}, "tray.usable_mm"),
        ({"tray__usable_mm": [-1, 0, 10, 10]}, "tray.usable_mm"),
        ({"image__kind": "bmp"}, "image.kind"),
        ({"image__compression": "lzw"}, "image.compression"),
        ({"image__row_order": "left"}, "image.row_order"),
        ({"image__layer_order": "sideways"}, "image.layer_order"),
        ({"image__pad_to": [8, 0]}, "image.pad_to"),
        ({"image__pad_to": 8}, "image.pad_to"),
        ({"image__mirrored_passes": "yes"}, "image.mirrored_passes"),
        ({"image__mirored_passes": True}, "image.mirored_passes"),
        ({"minimum_mm__wall": [0.1, 0.2]}, "minimum_mm.wall"),
        ({"minimum_mm__hole": [0.1, 0.2, 0]}, "minimum_mm.hole"),
        ({"minimum_mm__text": "small"}, "minimum_mm.text"),
        ({"process__droplet_pl": 0}, "process.droplet_pl"),
        ({"process__droplets_pl": {"soft": -1}}, "process.droplets_pl.soft"),
        ({"process__passes_per_layer": 0}, "process.passes_per_layer"),
        ({"process__passes_per_layer": 1.5}, "process.passes_per_layer"),
        ({"process__purge_g": -1}, "process.purge_g"),
        ({"process__purge_g": {"soft": -1}}, "process.purge_g.soft"),
        ({"process__waste_fraction": -0.1}, "process.waste_fraction"),
        ({"process__cost_per_kg": {"soft": -3}}, "process.cost_per_kg.soft"),
        ({"process__warm_up_s": -3}, "process.warm_up_s"),
        ({"channels": {f"m{k}": "" for k in range(256)}}, "channels"),
    ],
)
def test_reader_and_schema_refuse_the_same(changes, key):
    plain = data(**changes)
    with pytest.raises(InputError) as caught:
        PrintProfile.from_dict(plain, file="p.toml")
    assert (caught.value.key, caught.value.file) == (key, "p.toml")
    assert refused_by_schema(plain)


@pytest.mark.parametrize(
    ("changes", "key"),
    [
        ({"tray__usable_mm": [0, 0, 501, 10]}, "tray.usable_mm"),
        ({"tray__usable_mm": [20, 0, 10, 10]}, "tray.usable_mm"),
        ({"tray__usable_mm": [0, 0, 10, 10]}, "tray.edge_margin_mm"),
        ({"image__compression": "g4"}, "image.compression"),
        ({"image__bit_order": "first low"}, "image.bit_order"),
        ({"image": {"kind": "tiff pages", "bit_order": "first low"}}, "image.bit_order"),
        ({"image__polarity": "black is material"}, "image.polarity"),
        ({"image__kind": "png index", "tray__polarity": "black is material"}, "polarity"),
        ({"process__cost_unit": ""}, "process.cost_unit"),
    ],
)
def test_values_that_do_not_go_together(changes, key):
    with pytest.raises(InputError) as caught:
        PrintProfile.from_dict(data(**changes))
    assert caught.value.key == key


def test_everything_set_round_trips():
    plain = data(
        bias_mm=[0.05, -0.02, 0.0],
        image={
            "kind": "tiff pages", "compression": "g4", "bit_order": "first low",
            "row_order": "up", "layer_order": "down", "pad_to": [8, 64], "mirrored_passes": True,
            "polarity": "white is material",
        },
        minimum_mm={"wall": [0.4, 0.5, 0.2], "text": 0.7},
        channels={"m1": "soft", "m2": "soft", "m3": "", "support": "support"},
        process__purge_g={"soft": 3}, process__droplets_pl={"soft": 28.5},
    )  # fmt: skip
    profile = PrintProfile.from_dict(plain)
    assert PrintProfile.from_dict(json.loads(json.dumps(profile.as_dict()))) == profile
    assert profile.image.pad_to == (8, 64)
    assert profile.bias == (0.05, -0.02, 0.0)
    assert not refused_by_schema(plain)


def test_a_profile_with_none_of_the_new_keys_still_reads():
    plain = data()
    for key in ("bias_mm", "image"):
        del plain[key]
    plain["minimum_mm"] = {"wall": 0.5, "gap": 0.4, "strut": 0.6, "feature": 0.3}
    plain["process"] = {
        "droplet_pl": 30, "swath_mm": 60, "swath_s": [4, 6], "layer_s": [3, 5]
    }  # fmt: skip
    profile = PrintProfile.from_dict(plain)
    assert profile.bias == (0, 0, 0)
    assert profile.image.kind == "png bitmap"


def test_an_invented_tray_of_1_49e12_sites():
    # Check L2: an invented tray of 500 x 400 x 200 mm at 600 x 600 dpi and 15 um has 1.49e12
    # sites; that a tray holds on the order of 1e12 is common practice, no source.
    plain = data(pitch={"x_dpi": 600, "y_dpi": 600, "layer_um": 15})
    sites = PrintProfile.from_dict(plain).tray_sites
    assert sites == (11811, 9448, 13333)
    assert sites[0] * sites[1] * sites[2] == pytest.approx(1.49e12, rel=2e-3)


def test_sizes_along_axes():
    sizes = MinimumSizes.of(wall=(0.4, 0.6, 0.2), gap=0.3)
    assert (sizes.wall, sizes.wall_xyz) == (0.6, (0.4, 0.6, 0.2))
    assert (sizes.gap, sizes.gap_xyz) == (0.3, (0.3, 0.3, 0.3))
    assert dataclasses.replace(sizes, gap=0.5).wall_xyz == (0.4, 0.6, 0.2)
    assert dataclasses.replace(sizes, wall=0.5).wall_xyz == (0.5, 0.5, 0.5)
    assert sizes != MinimumSizes.of(wall=0.6, gap=0.3)


def test_parts_stand_in_the_usable_area():
    profile = PrintProfile.from_dict(data(tray__usable_mm=[100, 50, 300, 350]))
    assert profile.room == ((105, 295), (55, 345), (0, 200))
    assert PrintProfile.from_dict(profile.as_dict()) == profile
    item = placed(layered_part("distance"), profile)
    low = [float(o * p) for o, p in zip(item.raster.offset, profile.pitch, strict=True)]
    size = [float(n * p) for n, p in zip(item.raster.shape, profile.pitch, strict=True)]
    assert low[0] + size[0] / 2 == pytest.approx(200, abs=0.1)
    assert low[1] + size[1] / 2 == pytest.approx(200, abs=0.1)
    for position in ((104, 60), (294, 60), (110, 54), (110, 344.5)):
        with pytest.raises(InputError, match="usable tray"):
            placed(layered_part("distance"), profile, position=position)


def test_figures_by_resin():
    figures = ProcessFigures(purge_g={"soft": 4}, droplet_pl=30, droplets_pl={"soft": 25})
    assert (figures.purge_of("soft"), figures.purge_of("hard")) == (4, 0)
    assert (figures.droplet_of("soft"), figures.droplet_of("hard")) == (25, 30)
    assert ProcessFigures(purge_g=3).purge_of("any") == 3


def test_a_resin_in_several_channels_is_assigned_to_all_of_them():
    profile = STANDARD.replace(
        channels={"m1": "soft", "m2": "", "m3": "soft", "m4": "", "support": "support"}
    )
    assert profile.assign(["hard", "soft"]) == {"m1": "soft", "m2": "hard", "m3": "soft"}

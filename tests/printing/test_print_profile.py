"""Print profiles: exact pitches, shipped ones, and what is refused."""

from fractions import Fraction

import pytest

from voxelmat.errors import InputError
from voxelmat.model.profile import PrintProfile
from voxelmat.printing.profile import load_profile, shipped_profiles


def test_the_shipped_profiles_are_invented_and_round_trip():
    assert len(shipped_profiles()) == 3
    for name in shipped_profiles():
        profile = load_profile(name)
        assert profile.invented
        assert PrintProfile.from_dict(profile.as_dict()) == profile


def test_pitch_is_exact():
    # Check L1: 25400 / 600 um = 42.3333 um, exact by the inch of 25.4 mm.
    profile = load_profile("invented-standard")
    assert profile.pitch == (Fraction(254, 6000), Fraction(254, 3000), Fraction(3, 100))
    assert 11811 * profile.pitch_x <= 500 < 11812 * profile.pitch_x
    assert profile.tray_sites[0] == 11811


def data(**changes):
    plain = load_profile("invented-standard").as_dict()
    for key, value in changes.items():
        table, _, name = key.partition("__")
        if name:
            plain[table] = {**plain[table], name: value}
        else:
            plain[table] = value
    return plain


@pytest.mark.parametrize(
    ("changes", "key", "words"),
    [
        ({"pitch__x_dpi": 600}, "pitch.x_um", "exactly one"),
        ({"pitch__x_um": "abc"}, "pitch.x_um", "fraction"),
        ({"pitch__x_um": "1/0"}, "pitch.x_um", "fraction"),
        ({"pitch__x_um": -3}, "pitch.x_um", "above 0"),
        ({"pitch__x_um": "nan"}, "pitch.x_um", "fraction"),
        ({"tray__edge_margn_mm": 3}, "tray.edge_margn_mm", "edge_margin_mm"),
        ({"tray__size_mm": [1, 2]}, "tray.size_mm", "three lengths"),
        ({"tray__size_mm": [1, 2, float("nan")]}, "tray.size_mm", "three lengths"),
        ({"tray__origin_corner": "middle"}, "origin_corner", "front left"),
        ({"support__channel": "nope"}, "support.channel", "nope"),
        ({"channels": {"../evil": "a"}}, "channels", "letters"),
        ({"channels": {"a": "s", "b": "r", "support": "s"}}, "channels", "one channel"),
        ({"channels": {"a": "", "A": "", "support": "s"}}, "channels", "capitals"),
        ({"minimum_mm__wall": 0}, "minimum_mm.wall", "above 0"),
        ({"process__swath_s": [5, 4]}, "process.swath_s", "lowest"),
        ({"format": 2}, "format", "format number"),
        ({"colour": 1}, "colour", "Unknown"),
    ],
)
def test_bad_values_name_file_and_key(changes, key, words):
    with pytest.raises(InputError, match=words) as caught:
        PrintProfile.from_dict(data(**changes), file="p.toml")
    assert caught.value.key == key
    assert caught.value.file == "p.toml"


def test_wrong_types_and_missing_keys_are_input_errors():
    for broken in ({"tray__size_mm": "abc"}, {"process__swath_s": 4}, {"minimum_mm__wall": "x"}):
        with pytest.raises(InputError):
            PrintProfile.from_dict(data(**broken))
    with pytest.raises(InputError, match="missing"):
        PrintProfile.from_dict({"format": 1, "name": "a"})


def test_unknown_profile_and_broken_file(tmp_path):
    with pytest.raises(InputError, match="Did you mean 'invented-fine'"):
        load_profile("invented-fin")
    path = tmp_path / "mine.toml"
    path.write_text("= nonsense")
    with pytest.raises(InputError, match="not valid TOML"):
        load_profile(path)
    path.write_text('format = 1\nname = "a"\n[pitch]\nx_dpi = 600\n')
    with pytest.raises(InputError, match=r"mine\.toml"):
        load_profile(path)


def test_channels_are_assigned_loaded_first_then_free_ones():
    profile = load_profile("invented-standard").replace(
        channels={"m1": "", "m2": "soft", "m3": "", "support": "support"}
    )
    assert profile.assign(["hard", "soft"]) == {"m1": "hard", "m2": "soft"}
    with pytest.raises(InputError, match="no channel for 'c'"):
        profile.assign(["a", "b", "c", "d"])

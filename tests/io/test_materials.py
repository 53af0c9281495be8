"""The shipped library, a design's own files, and files that are refused."""

import json
from pathlib import Path

import numpy as np
import pytest
from jsonschema import Draft202012Validator

from voxelmat.errors import FileFormatError, InputError, VoxelmatError
from voxelmat.io.materials import load_curve, load_library, load_material, materials_folder
from voxelmat.io.schema import load_schema
from voxelmat.material.hardness import modulus_from_shore_a
from voxelmat.material.table import material_rows
from voxelmat.model.laws import CalibratedCurve, Voigt

RESIN = (materials_folder() / "elastomer-a27.toml").read_text(encoding="utf-8")
CURVE = (materials_folder() / "curves" / "elastomer-a27--rigid-general.toml").read_text(
    encoding="utf-8"
)
LIBRARY = load_library()


def put(folder: Path, text: str, name: str = "own.toml") -> Path:
    path = folder / name
    path.write_text(text, encoding="utf-8")
    return path


# ---------------------------------------------------------------- what is shipped
def test_the_library_spans_what_a_printer_lays():
    kinds = [m.kind for m in LIBRARY.values()]
    assert kinds.count("rigid") >= 2
    assert kinds.count("high-temperature") >= 1
    assert kinds.count("support") >= 1
    assert kinds.count("elastomer") >= 4
    shore = [m.shore_A for m in LIBRARY.values() if m.kind == "elastomer"]
    assert min(shore) <= 30
    assert max(shore) == 95
    assert LIBRARY.notes == ()


@pytest.mark.parametrize("name", list(LIBRARY))
def test_every_value_has_a_range_and_says_that_it_is_indicative(name):
    material = LIBRARY[name]
    for constant in (material.E, material.nu, material.density):
        low, high = constant.band
        assert low < constant.value < high
        assert constant.indicative
    assert material.temperature_range_degC[0] <= material.E.temperature_degC
    # Typical ranges, indicative, from memory.
    if material.kind == "rigid":
        assert 2000 <= material.E.value <= 3000
        assert 50 <= material.strength.value <= 70
        assert 0.05 <= material.elongation.value <= 0.25
        assert 1.16e-9 <= material.density.value <= 1.20e-9
        assert 50 <= material.glass_transition_degC <= 60
        assert 60e-6 <= material.expansion.value <= 100e-6
    if material.kind == "elastomer" and material.shore_A <= 40:
        assert 0.8 <= material.strength.value <= 3.0
        assert 1.5 <= material.elongation.value <= 2.7
        assert 1.10e-9 <= material.density.value <= 1.15e-9
        assert -10 <= material.glass_transition_degC <= 0


@pytest.mark.parametrize("name", [n for n, m in LIBRARY.items() if m.shore_A is not None])
def test_elastomers_are_as_stiff_as_their_hardness_says(name):
    material = LIBRARY[name]
    band = modulus_from_shore_a(material.shore_A)
    assert band.low <= material.E.value <= band.high
    # The record's range overlaps Gent's value with its accuracy of 25 %.
    assert material.E.band[0] <= 1.25 * band.gent
    assert material.E.band[1] >= 0.75 * band.gent


@pytest.mark.parametrize("curve", LIBRARY.curves, ids=lambda c: f"{c.first}+{c.second}")
def test_shipped_curves_are_indicative_and_within_the_bounds(curve):
    assert curve.indicative
    first, second = LIBRARY[curve.first], LIBRARY[curve.second]
    assert (curve.E[0], curve.E[-1]) == (first.E.value, second.E.value)
    f = np.linspace(0, 1, 41)
    value = LIBRARY.law("calibrated").evaluate(
        np.c_[1 - f, f],
        [first.bulk, second.bulk],
        [first.shear, second.shear],
        resins=[curve.first, curve.second],
    )
    assert np.all(np.diff(value.young) > 0)
    assert not value.uncalibrated.any()
    # Knots are rounded and mean something: the clamp is not what makes the curve.
    assert value.clipped.mean() < 0.1
    for f0, low, mid, high in zip(curve.fraction, curve.E_low, curve.E, curve.E_high, strict=True):
        assert low < mid < high or f0 in (0.0, 1.0)


def test_schemas_are_schemas():
    for name in ("material", "blend_curve"):
        Draft202012Validator.check_schema(load_schema(name))


def test_the_table_is_plain_data():
    rows = material_rows(LIBRARY)
    assert len(rows) == len(LIBRARY)
    assert json.loads(json.dumps(rows)) == rows


# ---------------------------------------------------------------- a design's own
def test_own_files_add_and_replace_with_a_note(tmp_path):
    new = RESIN.replace('name = "elastomer-a27"', 'name = "house-soft"')
    changed = RESIN.replace("value = 1.0", "value = 1.1")
    library = load_library([put(tmp_path, new, "a.toml"), put(tmp_path, changed, "b.toml")])
    assert library["house-soft"].E.value == 1.0
    assert library["elastomer-a27"].E.value == 1.1
    assert len(library.notes) == 1
    assert "b.toml" in library.notes[0]
    assert "elastomer-a27" in library.notes[0]
    assert set(library.digests) == {"a.toml", "b.toml"}


def test_a_folder_of_own_files(tmp_path):
    (tmp_path / "curves").mkdir()
    put(tmp_path, RESIN.replace("elastomer-a27", "house-soft"))
    put(tmp_path / "curves", CURVE.replace("elastomer-a27", "house-soft"), "c.toml")
    library = load_library([tmp_path])
    assert library.curve("rigid-general", "house-soft").E[0] == 1.0
    assert library.curve("house-soft", "rigid-tough") is None
    assert library.notes == ()


def test_a_resin_that_left_its_curve_is_said(tmp_path):
    stiffer = RESIN
    for old, new in (("value = 1.0", "value = 2.0"), ("low = 0.75", "low = 1.5"),
                     ("high = 1.3", "high = 2.5")):  # fmt: skip
        stiffer = stiffer.replace(old, new, 1)
    notes = load_library([put(tmp_path, stiffer)]).notes
    assert any("outside its range" in n and "rigid-general" in n for n in notes)


def test_values_come_in_inside_units(tmp_path):
    material = load_material(put(tmp_path, RESIN))
    assert material.density.value == pytest.approx(1.12e-9)
    assert material.elongation.value == pytest.approx(2.3)
    assert material.expansion.value == pytest.approx(210e-6)
    assert material.E.rate_per_s == 0.33
    assert material.max_duration_s == 60.0


def test_a_library_names_the_nearest():
    with pytest.raises(InputError, match="Did you mean 'rigid-general'"):
        LIBRARY["rigid-generl"]
    with pytest.raises(InputError, match="Did you mean 'calibrated'"):
        LIBRARY.law("calibratd")
    assert LIBRARY.law("voigt") == Voigt()
    law = LIBRARY.law("calibrated", side="low")
    assert isinstance(law, CalibratedCurve)
    assert law.side == "low"


# ---------------------------------------------------------------- refused
@pytest.mark.parametrize(
    ("old", "new", "key", "words"),
    [
        ("value = 1.0\n", "value = -1.0\n", "E_MPa.value", "above 0"),
        ("value = 0.495", "value = 0.5", "nu.value", "0.49 to 0.4995"),
        ("high = 0.4995", "high = 0.5", "nu.high", "below 0.5"),
        ("value = 1.12", "value = nan", "density_g_cm3.value", "finite"),
        ("low = 0.75", "low = -inf", "E_MPa.low", "finite"),
        ("low = 0.75", "low = 1.2", "E_MPa", "low 1.2, value 1.0"),
        ("low = -10.0", "low = -8.0", "glass_transition_degC", "low -8.0"),
        ("[density_g_cm3]", "[densty_g_cm3]", "densty_g_cm3", "'density_g_cm3'"),
        ("max_cycles", "max_cicles", "conditions.max_cicles", "'max_cycles'"),
        ("rate_per_s = 0.33", "rate = 0.33", "E_MPa.rate", "'rate_per_s'"),
        ('kind = "elastomer"', 'kind = "rubber"', "kind", "rigid, elastomer"),
        ('kind = "elastomer"\n', "", "kind", "missing"),
        ("format = 1", "format = 2", "format", "must be 1"),
        ("value = 1.12", 'value = "1.12"', "density_g_cm3.value", "a number"),
        ("max_cycles = 1", "max_cycles = 1.5", "conditions.max_cycles", "a whole number"),
        ("temperature_min_degC = 15.0", "temperature_min_degC = 95.0",
         "conditions.temperature_min_degC", "swap"),
        ('name = "elastomer-a27"', 'name = "Elastomer A27"', "name", "Lower-case"),
        ("#E8B04A", "orange", "colour", "#rrggbb"),
    ],
)  # fmt: skip
def test_bad_values_name_file_and_key(tmp_path, old, new, key, words):
    assert old in RESIN
    path = put(tmp_path, RESIN.replace(old, new, 1))
    with pytest.raises(InputError) as caught:
        load_library([path])
    assert caught.value.file == str(path)
    assert caught.value.key == key
    assert words in str(caught.value)


@pytest.mark.parametrize(
    ("old", "new", "key"),
    [
        ("E_MPa = [1.0, ", "E_MPa = [-1.0, ", "E_MPa[0]"),
        ("fraction = [0.0, 0.1", "fraction = [0.0, 0.3", "fraction"),
        ("nu = [0.495", "nu = [0.5", "nu[0]"),
        ("rigid-general", "rigid-generl", "second"),
        ("E_high_MPa", "E_hi_MPa", "E_hi_MPa"),
    ],
)
def test_bad_curves_name_file_and_key(tmp_path, old, new, key):
    path = put(tmp_path, CURVE.replace(old, new))
    with pytest.raises(InputError) as caught:
        load_library([path])
    assert Path(caught.value.file).name == path.name
    assert caught.value.key == key


def test_files_that_are_no_toml(tmp_path):
    with pytest.raises(InputError, match="no such file"):
        load_material(tmp_path / "none.toml")
    with pytest.raises(InputError, match="folder"):
        load_curve(tmp_path)
    with pytest.raises(InputError, match=r"no \*\.toml"):
        load_library([tmp_path])
    with pytest.raises(FileFormatError, match="line 1"):
        load_material(put(tmp_path, "format = = 1"))
    bad = tmp_path / "bytes.toml"
    bad.write_bytes(b"\xff\xfe\x00")
    with pytest.raises(FileFormatError, match="UTF-8"):
        load_material(bad)


def test_a_truncated_file_is_never_half_a_material(tmp_path):
    # Every proper prefix either fails with our own error or lacks only the closing conditions.
    whole = load_material(put(tmp_path, RESIN))
    for length in range(0, len(RESIN), 37):
        try:
            material = load_material(put(tmp_path, RESIN[:length]))
        except VoxelmatError:
            continue
        assert material.E == whole.E
        assert material.density == whole.density

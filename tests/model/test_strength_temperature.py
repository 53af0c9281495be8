"""Strength over temperature: read, checked, and used by safety factors."""

from pathlib import Path

import numpy as np
import pytest

from voxelmat.errors import InputError
from voxelmat.fea.static import solve
from voxelmat.fea.stress import safety, safety_field
from voxelmat.io.materials import load_material, materials_folder
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.loadcase import Force, LoadCase, Support
from voxelmat.model.material import Constant, Material, TemperatureFactor
from voxelmat.model.part import Part
from voxelmat.model.region import FaceRegion

COURSE = TemperatureFactor(
    temperature_degC=(10.0, 20.0, 40.0), factor=(1.5, 1.0, 0.5), source="made up"
)


def resin(**change):
    given = {
        "name": "r",
        "kind": "rigid",
        "E": Constant(value=1000.0),
        "nu": Constant(value=0.0),
        "density": Constant(value=1e-9),
        "strength": Constant(value=40.0, low=30.0, high=60.0, temperature_degC=20.0, source="x"),
        "strength_over_temperature": COURSE,
    }
    return Material(**{**given, **change})


def test_straight_between_the_temperatures():
    for temperature, value in ((20.0, 40.0), (30.0, 30.0), (15.0, 50.0), (90.0, 20.0)):
        found = resin().strength_at(temperature)
        assert found.value == pytest.approx(value)
        assert found.band == pytest.approx((0.75 * value, 1.5 * value))
        assert not found.indicative
    plain = resin(strength_over_temperature=None)
    assert plain.strength_at(90.0) == plain.strength
    assert resin(strength=None, strength_over_temperature=None).strength_at(20.0) is None


def test_factors_count_from_the_test_temperature():
    strength = Constant(value=20.0, temperature_degC=30.0)
    assert resin(strength=strength).strength_at(20.0).value == pytest.approx(20.0 / 0.75)


def test_an_indicative_course_makes_the_strength_indicative():
    course = TemperatureFactor(temperature_degC=(10.0, 40.0), factor=(1.0, 0.5))
    assert resin(strength_over_temperature=course).strength_at(30.0).indicative


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"temperature_range_degC": (5.0, 30.0)}, "must cover"),
        ({"strength": Constant(value=40.0, temperature_degC=50.0)}, "must cover"),
        ({"strength": None}, "needs a strength"),
    ],
)
def test_a_course_covers_the_conditions(change, words):
    with pytest.raises(InputError, match=words):
        resin(**change)


@pytest.mark.parametrize(
    ("t", "f"), [((10.0,), (1.0,)), ((10.0, 20.0), (1.0,)), ((20.0, 10.0), (1.0, 0.5)),
                 ((10.0, 20.0), (1.0, -0.5)), ((10.0, float("nan")), (1.0, 0.5))]
)  # fmt: skip
def test_wrong_courses(t, f):
    with pytest.raises(InputError):
        TemperatureFactor(temperature_degC=t, factor=f)


def pulled(temperature):
    part = Part.uniform(VoxelGrid(shape=(4, 2, 2), spacing=(1.0, 1.0, 1.0)), resin())
    case = LoadCase(
        name="pull",
        supports=(Support(region=FaceRegion(name="low", side="x-")),),
        loads=(Force(region=FaceRegion(name="high", side="x+"), vector=(20.0, 0.0, 0.0)),),
        temperature_degC=temperature,
    )
    return solve(part, case, tol=1e-10)


def test_safety_factors_take_the_temperature_of_the_case():
    """5 MPa (F / A) against 40 MPa at 20 degC and 30 MPa at 30 degC."""
    for temperature, factor in ((20.0, 8.0), (30.0, 6.0)):
        result = pulled(temperature)
        for side, share in (("value", 1.0), ("low", 0.75), ("high", 1.5)):
            np.testing.assert_allclose(safety_field(result, side), factor * share, rtol=1e-5)
        found = safety(result)[0]
        assert (found.low, found.factor, found.high) == pytest.approx(
            (0.75 * factor, factor, 1.5 * factor), rel=1e-5
        )
    with pytest.raises(InputError):
        safety_field(result, "lowest")


def test_the_course_in_a_file(tmp_path):
    text = (materials_folder() / "rigid-general.toml").read_text()
    course = """
[strength_over_temperature]
temperature_degC = [10.0, 23.0, 45.0]
factor = [1.1, 1.0, 0.6]
source = "indicative: invented for a test"
"""
    path = Path(tmp_path / "mine.toml")
    path.write_text(text + course)
    assert load_material(path).strength_at(34.0).value == pytest.approx(0.8 * 60.0)
    path.write_text(text + course.replace("[1.1, 1.0, 0.6]", "[1.1, 1.0]"))
    with pytest.raises(InputError) as caught:
        load_material(path)
    assert caught.value.key == "strength_over_temperature"

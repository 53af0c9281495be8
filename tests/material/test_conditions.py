"""Cautions about materials used outside their record, and the table of materials."""

import math

import pytest

from voxelmat.errors import InputError
from voxelmat.material.conditions import cautions_for
from voxelmat.material.table import material_rows
from voxelmat.model.material import Constant, Material

RIGID = Material(
    name="stiff",
    kind="rigid",
    E=Constant(value=2500.0, low=2000.0, high=3000.0, unit="MPa", rate_per_s=1e-3),
    nu=Constant(value=0.36),
    density=Constant(value=1.18e-9, unit="tonne/mm^3"),
    glass_transition_degC=54.0,
    temperature_range_degC=(15.0, 35.0),
    max_duration_s=600.0,
    max_cycles=10,
)
RUBBER = RIGID.replace(
    name="soft", kind="elastomer", glass_transition_degC=-9.0, shore_A=27.0,
    E=Constant(value=1.0, low=0.7, high=1.3, unit="MPa"), temperature_range_degC=(-60.0, 100.0),
)  # fmt: skip
WITHIN = {"temperature_degC": 23.0, "duration_s": 600.0, "cycles": 10}


@pytest.mark.parametrize("material", [RIGID, RUBBER])
def test_within_the_record_nothing_is_said(material):
    assert cautions_for(material, **WITHIN, rate_per_s=2e-3) == []


@pytest.mark.parametrize(
    ("material", "change", "words"),
    [
        (RIGID, {"temperature_degC": 36.0}, ["36.0 degC", "15.0 to 35.0 degC"]),
        (RIGID, {"temperature_degC": 14.9}, ["14.9 degC"]),
        (RIGID.replace(temperature_range_degC=(0, 90)), {"temperature_degC": 40.0},
         ["close to its glass transition"]),
        (RIGID.replace(temperature_range_degC=(0, 90)), {"temperature_degC": 80.0}, ["rubbery"]),
        (RUBBER, {"temperature_degC": -30.0}, ["glassy"]),
        (RUBBER, {"temperature_degC": -15.0}, ["close to its glass transition"]),
        (RIGID, {"duration_s": 86400.0 * 7}, ["7.00 days", "10.0 min", "creep"]),
        (RIGID, {"cycles": 100000}, ["100000 times", "Fatigue"]),
        (RIGID, {"rate_per_s": 1.0}, ["stiffer"]),
        (RIGID, {"rate_per_s": 1e-6}, ["softer"]),
    ],
)  # fmt: skip
def test_each_caution_says_why(material, change, words):
    found = cautions_for(material, **(WITHIN | change))
    assert len(found) == 1
    assert found[0].startswith(material.name)
    for word in words:
        assert word in found[0]


def test_several_cautions_at_once():
    found = cautions_for(RIGID, temperature_degC=60.0, duration_s=1e6, cycles=1000)
    assert len(found) == 4


@pytest.mark.parametrize(
    "change",
    [{"temperature_degC": math.nan}, {"temperature_degC": -300.0}, {"duration_s": -1.0},
     {"cycles": math.inf}, {"rate_per_s": math.nan}],
)  # fmt: skip
def test_senseless_conditions_are_refused(change):
    with pytest.raises(InputError):
        cautions_for(RIGID, **(WITHIN | change))


def test_rows_of_the_table():
    rows = material_rows({"stiff": RIGID, "soft": RUBBER})
    assert [r["name"] for r in rows] == ["soft", "stiff"]
    assert rows[1]["density_g_cm3"] == 1.18
    assert rows[1]["E_low_MPa"] == 2000.0
    assert rows[1]["elongation_percent"] is None
    assert rows[0]["shore_A"] == 27.0
    assert rows[0]["source"] == "indicative"

"""Plates, rotations, symmetry planes, beds, temperatures: from the design file to a result."""

from __future__ import annotations

import math
from copy import deepcopy

import numpy as np
import pytest

from voxelmat.errors import InputError
from voxelmat.fea.static import solve
from voxelmat.io.design import parse_design
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.loadcase import Foundation, InitialStrain, Temperature
from voxelmat.model.material import Constant, Material
from voxelmat.model.part import Part
from voxelmat.workflow.report_words import held_words, load_words, plate_words
from voxelmat.workflow.resolve import resolve
from voxelmat.workflow.spread import driven_by, spread_of
from voxelmat.workflow.verdicts import verdicts

RESIN = Material(
    name="hard",
    kind="rigid",
    E=Constant(value=1000.0, low=800.0, high=1250.0, unit="MPa"),
    nu=Constant(value=0.3),
    density=Constant(value=1.1e-9),
    expansion=Constant(value=1e-4, unit="1/K"),
)
GRID = VoxelGrid(shape=(6, 5, 4), spacing=(1.0, 1.0, 1.0), origin=(-1.0, -1.0, -1.0))

#: A block of 4 x 3 x 2 mm with a corner at the origin; invented.
DATA = {
    "format": 1, "name": "block", "grid": {"spacing_mm": [1, 1, 1]},
    "body": [{"name": "all", "mesh": "a.stl", "unit": "mm", "resin": "hard"}],
    "region": [
        {"name": "foot", "kind": "face", "side": "z-"},
        {"name": "head", "kind": "face", "side": "z+"},
    ],
    "load_case": [{
        "name": "warm", "duration_s": 1.0, "temperature_degC": 40.0, "cycles": 1,
        "support": [
            {"symmetry": "x-", "at_mm": 0.0},
            {"symmetry": "y-"},
            {"region": "foot", "displacement_mm": {"z": 0}, "rotation_deg": [0, 0, 0]},
        ],
        "load": [
            {"kind": "temperature", "stress_free_degC": 20.0},
            {"kind": "temperature", "region": "head", "temperature_degC": 30,
             "stress_free_degC": 30},
            {"kind": "initial strain", "strain": [0, 0, 0.001, 0, 0, 0]},
            {"kind": "foundation", "region": "head", "stiffness_N_mm3": 0.5, "acts": "all"},
        ],
    }],
}  # fmt: skip

PLATE = {
    "name": "press", "region": "head", "point_mm": [0, 0, 2], "rotation_deg": {"x": 0, "y": 0.1},
    "translation_mm": {"x": 0}, "force_N": [0, 0, -5], "moment_N_mm": [0, 0, 2],
}  # fmt: skip


def block():
    solid = np.zeros(GRID.shape, dtype=np.uint16)
    solid[1:5, 1:4, 1:3] = 1
    return Part(
        grid=GRID,
        resins=(RESIN,),
        palette=(EMPTY, Blend.pure("hard")),
        labels=solid,
        bodies={"all": solid > 0},
    )


def case_of(**change):
    data = deepcopy(DATA)
    data["load_case"][0].update(change)
    return resolve(parse_design(data), block()).load_cases[0]


def test_what_is_written_is_what_is_solved():
    case = case_of()
    mirror, other, foot = case.supports
    assert mirror.displacement == (0.0, None, None)
    assert other.displacement == (None, 0.0, None)
    assert foot.displacement == (None, None, 0.0)
    warm, cool, grown, bed = case.loads
    assert isinstance(warm, Temperature)
    assert (warm.temperature, warm.stress_free, warm.region) == (40.0, 20.0, None)
    assert cool.region.name == "head"
    assert isinstance(grown, InitialStrain)
    assert isinstance(bed, Foundation)
    assert (bed.stiffness, bed.acts) == (0.5, "all")
    result = solve(block(), case)
    # free to expand but for the bed, which hardly holds it: a dT along x, e0 more along z
    assert np.nanmax(np.abs(result.displacement[5, :, :, 0] - 4 * 2e-3)[1:5, 1:4]) < 1e-4
    assert driven_by(result) == "displacement"
    spread_of(result)


def test_a_plate_from_the_file():
    foot = [{"region": "foot", "fixed": True}]
    case = case_of(support=foot, load=[], plate=[PLATE])
    (plate,) = case.plates
    assert plate.translation == (0.0, None, None)
    assert plate.rotation == (0.0, pytest.approx(math.radians(0.1)), None)
    assert plate.point == (0.0, 0.0, 2.0)
    assert (plate.force, plate.moment) == ((0, 0, -5), (0, 0, 2))
    result = solve(block(), case)
    assert result.plates["press"].force[2] == pytest.approx(-5.0, rel=1e-6)
    assert result.plates["press"].rotation[1] == pytest.approx(math.radians(0.1), rel=1e-9)
    assert driven_by(result) == "both"


def test_a_turned_support_from_the_file():
    turned = {"region": "head", "fixed": True, "rotation_deg": [0, 0, 2], "about_mm": [2, 1.5, 2]}
    case = case_of(support=[{"region": "foot", "fixed": True}, turned], load=[])
    assert case.supports[1].rotation == (0, 0, pytest.approx(math.radians(2)))
    assert case.supports[1].about == (2.0, 1.5, 2.0)
    assert case.supports[1].moves


@pytest.mark.parametrize(("change", "key", "words"), [
    ({"support": [{"symmetry": "x-", "at_mm": 0.5}]}, "load_case[0].support[0].symmetry",
     "goes through it"),
    ({"support": [{"symmetry": "x-", "region": "foot"}]}, "load_case[0].support[0].region",
     "does not go with symmetry"),
    ({"support": [{"region": "foot", "fixed": True, "at_mm": 1}]},
     "load_case[0].support[0].at_mm", "does not go with fixed"),
    ({"support": [{"fixed": True}]}, "load_case[0].support[0].region", "missing"),
    ({"plate": [PLATE, PLATE]}, "load_case[0].plate[1].name", "given twice"),
    ({"plate": [{**PLATE, "region": "hed"}]}, "load_case[0].plate[0].region", "'head'"),
    ({"plate": [{**PLATE, "force_N": [1, 0, 0]}]}, "load_case[0].plate[0]", "both a given"),
    ({"plate": [{**PLATE, "angle": 1}]}, "load_case[0].plate[0].angle", "not known"),
    ({"load": [{"kind": "temperature"}]}, "load_case[0].load[0].stress_free_degC", "missing"),
    ({"load": [{"kind": "foundation", "region": "head", "stiffness_N_mm3": 0}]},
     "load_case[0].load[0].stiffness_N_mm3", "above 0"),
    ({"load": [{"kind": "initial strain", "strain": [0, 1]}]}, "load_case[0].load[0].strain",
     ""),
])  # fmt: skip
def test_faults_name_their_key(change, key, words):
    with pytest.raises(InputError) as caught:
        case_of(**change)
    assert caught.value.key == key
    assert words in str(caught.value)


def test_words_of_the_report():
    turned = {"region": "foot", "fixed": True, "rotation_deg": [0, 0, 2]}
    case = case_of(support=[*DATA["load_case"][0]["support"], turned], plate=[PLATE])
    assert held_words(case.supports[0]) == "x held"
    assert "turned by 0, 0, 2.00° about 0, 0, 0 mm" in held_words(case.supports[3])
    words = [load_words(load) for load in case.loads]
    assert words[0] == ("temperature", "everywhere", "40.0 °C, without stress at 20.0 °C")
    assert words[2][0] == "initial strain"
    assert words[3] == ("elastic bed", "head", "0.500 N/mm³ in every direction")
    said = plate_words(case.plates[0])
    assert said.startswith("x held, no turn about x, turned 0.100° about y")
    assert "0, 0, -5.00 N" in said


def test_stiffness_under_a_plate():
    """Force over how far the plate goes; its reaction where the way is given."""
    foot = [{"region": "foot", "fixed": True}]
    level = {"name": "press", "region": "head", "rotation_deg": {"x": 0, "y": 0, "z": 0}}
    push = {**level, "force_N": [0, 0, -5]}
    data = deepcopy(DATA)
    data["load_case"][0].update(support=foot, load=[], plate=[push])
    data["requirement"] = [
        {"name": "firm", "measure": "stiffness", "load_case": "warm", "region": "head",
         "at_least_N_mm": 1.0},
    ]  # fmt: skip
    resolved = resolve(parse_design(data), block())
    result = solve(block(), resolved.load_cases[0])
    (verdict,) = verdicts(resolved, result.part, {"warm": result})
    stiff = -5.0 / result.plates["press"].translation[2]
    assert verdict.value == pytest.approx(stiff, rel=1e-9)
    data["load_case"][0]["plate"] = [{**level, "translation_mm": {"x": 0, "y": 0, "z": -0.01}}]
    data["requirement"] = [
        {"name": "firm", "measure": "reaction", "load_case": "warm", "region": "head",
         "component": "z", "at_most_N": -0.01},
    ]  # fmt: skip
    resolved = resolve(parse_design(data), block())
    result = solve(block(), resolved.load_cases[0])
    (verdict,) = verdicts(resolved, result.part, {"warm": result})
    assert verdict.value == pytest.approx(-0.01 * stiff, rel=1e-3)


def test_doubts_about_expansion_and_symmetry():
    """Data without a source, a range, a temperature beyond the record; no edge at a mirror."""
    data = deepcopy(DATA)
    data["load_case"][0]["support"][2] = {"symmetry": "z-"}
    data["load_case"][0]["load"] = [
        {"kind": "temperature", "temperature_degC": 90, "stress_free_degC": 20},
    ]
    data["requirement"] = [
        {"name": "still", "measure": "largest strain", "load_case": "warm", "at_most": 1.0},
    ]
    resolved = resolve(parse_design(data), block())

    def doubts(part):
        result = solve(part, resolved.load_cases[0])
        return " | ".join(verdicts(resolved, part, {"warm": result})[0].reasons)

    said = doubts(block())
    assert "the thermal expansion of 'hard' is indicative" in said
    assert "90" in said
    assert "symmetry plane" not in said
    wide = RESIN.replace(expansion=Constant(value=1e-4, low=8e-5, high=1e-4, source="made up"))
    said = doubts(block().replace(resins=(wide,)))
    assert "the range of the thermal expansion of 'hard' is not carried to this value" in said
    assert "expansion of 'hard' is indicative" not in said


def test_a_peak_beside_a_plate_is_doubted():
    data = deepcopy(DATA)
    data["load_case"][0].update(
        support=[{"region": "foot", "slide": ["x", "y"]}, {"symmetry": "x-"}, {"symmetry": "y-"}],
        load=[],
        plate=[{"name": "grip", "region": "head", "translation_mm": {"x": 0, "y": 0, "z": -0.01},
                "rotation_deg": {"x": 0, "y": 0, "z": 0}}],
    )  # fmt: skip
    data["requirement"] = [
        {"name": "holds", "measure": "largest strain", "load_case": "warm", "at_most": 1.0},
    ]
    resolved = resolve(parse_design(data), block())
    result = solve(block(), resolved.load_cases[0])
    (verdict,) = verdicts(resolved, result.part, {"warm": result})
    assert "at the plate on 'head'" in " | ".join(verdict.reasons)

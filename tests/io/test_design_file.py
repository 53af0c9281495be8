"""Design files: what is written is what is read, and digests follow the content."""

from __future__ import annotations

import json
import math
import tomllib
from copy import deepcopy
from importlib.resources import files

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from jsonschema import Draft202012Validator

from voxelmat.io.design import load_design, parse_design
from voxelmat.io.materials import load_library
from voxelmat.io.schema import load_schema
from voxelmat.model.laws import LAWS
from voxelmat.model.region import parse_side
from voxelmat.model.requirement import MEASURES

RESINS = ["rigid-general", "elastomer-a40"]
NAMES = st.text('abcdefgh -_äß"\\', min_size=1, max_size=8)
NUMBERS = st.one_of(
    st.integers(-1000, 1000), st.floats(-1e6, 1e6, allow_nan=False, allow_infinity=False)
)
POSITIVE = st.floats(1e-3, 1e3)
TRIPLE = st.lists(NUMBERS, min_size=3, max_size=3)


def as_toml(value):
    """One value as TOML; tables inline, so that any nesting can be written."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        return json.dumps(value, ensure_ascii=False)
    if isinstance(value, (int, float)):
        return repr(value)
    if isinstance(value, list):
        return "[" + ", ".join(as_toml(v) for v in value) + "]"
    return "{" + ", ".join(f"{json.dumps(k)} = {as_toml(v)}" for k, v in value.items()) + "}"


def write(path, data):
    path.write_text("".join(f"{k} = {as_toml(v)}\n" for k, v in data.items()), encoding="utf-8")
    return path


@st.composite
def regions(draw, name):
    kind = draw(st.sampled_from(["box", "sphere", "face", "patch", "half-space", "label"]))
    low = draw(TRIPLE)
    given_ = {
        "box": {"low_mm": low, "high_mm": [v + 1 for v in low]},
        "sphere": {"centre_mm": low, "radius_mm": draw(POSITIVE)},
        "face": {"side": draw(st.sampled_from(["x-", "y+", "z-"])), "depth_mm": 0.5},
        "patch": {"side": "z+", "outline_mm": [[0, 0], [1, 0], [draw(NUMBERS), 1]]},
        "half-space": {"point_mm": low, "normal": [0, 0, draw(POSITIVE)]},
        "label": {"labels": draw(st.lists(st.integers(1, 9), min_size=1, max_size=3))},
    }[kind]
    return {"name": name, "kind": kind, **given_}


@st.composite
def designs(draw):
    """Tables of a design that is right in all its parts."""
    names = draw(st.lists(NAMES, min_size=4, max_size=5, unique=True))
    bodies = [{"name": names[0], "mesh": "a.stl", "unit": "mm", "resin": RESINS[0]}]
    if draw(st.booleans()):
        blend = {r: draw(POSITIVE) for r in RESINS}
        bodies.append({"name": names[1], "mesh": "b.3mf", "blend": blend, "priority": 2})
    region = [draw(regions(n)) for n in names[2:]]
    place = st.sampled_from([b["name"] for b in bodies] + [r["name"] for r in region])
    held = draw(
        st.sampled_from([{"fixed": True}, {"slide": ["x"]}, {"displacement_mm": {"z": -1}}])
    )
    case = {
        "name": "case",
        "duration_s": draw(POSITIVE),
        "temperature_degC": draw(st.floats(-50, 200)),
        "cycles": draw(st.integers(1, 10**6)),
        "support": [{"region": draw(place), **held}],
        "load": [
            {"kind": "force", "region": draw(place), "force_N": draw(TRIPLE)},
            {"kind": "body force", "acceleration_m_s2": draw(TRIPLE)},
        ],
    }
    data = {
        "format": 1,
        "name": draw(NAMES),
        "seed": draw(st.integers(0, 2**63 - 1)),
        "grid": {"spacing_mm": draw(st.lists(POSITIVE, min_size=3, max_size=3))},
        "body": bodies,
        "region": region,
        "load_case": [case],
        "requirement": [
            {"name": "light", "measure": "mass", "at_most_g": draw(NUMBERS)},
            {
                "name": "stiff",
                "measure": "displacement",
                "load_case": "case",
                "region": draw(place),
                "component": "z",
                "at_least_mm": draw(NUMBERS),
            },
        ],
    }
    if draw(st.booleans()):
        data["optimise"] = {
            "resins": RESINS,
            "objective": "compliance",
            "filter_radius_mm": draw(POSITIVE),
            "keep": [draw(place)],
            "limit": [{"kind": "mass", "at_most_g": draw(POSITIVE)}],
        }
    if draw(st.booleans()):
        data["print"] = {"profile": "invented-standard", "orientation": ["x 90", "z -90"]}
    return data


@settings(deadline=None, max_examples=25)
@given(data=designs())
def test_what_is_written_is_read(tmp_path_factory, data):
    folder = tmp_path_factory.mktemp("design")
    for name in ("a.stl", "b.3mf"):
        (folder / name).write_bytes(name.encode())
    first = load_design(write(folder / "one.toml", data))
    again = load_design(write(folder / "two.toml", dict(first.data)))
    assert first.data == data
    assert first.digest == again.digest
    assert [r.settings for r in first.regions] == [r.settings for r in again.regions]
    assert first.cases == again.cases
    assert first.spacing_mm == tuple(data["grid"]["spacing_mm"])
    assert first.cases[0].duration_s == data["load_case"][0]["duration_s"]
    assert first.cases[0].loads[0].settings["force_N"] == data["load_case"][0]["load"][0]["force_N"]
    assert first.requirements[0].at_most == data["requirement"][0]["at_most_g"]
    assert first.requirements[1].at_least == data["requirement"][1]["at_least_mm"]
    assert [b.name for b in first.bodies] == [b["name"] for b in data["body"]]


SMALL = {
    "format": 1,
    "name": "small",
    "grid": {"spacing_mm": [1, 1, 1]},
    "body": [{"name": "block", "mesh": "a.stl", "unit": "mm", "resin": "rigid-general"}],
}


@pytest.fixture
def folder(tmp_path):
    (tmp_path / "a.stl").write_bytes(b"one")
    return tmp_path


def test_digest_follows_what_counts(folder):
    base = load_design(write(folder / "d.toml", SMALL))
    renamed = load_design(write(folder / "e.toml", {**SMALL, "name": "other", "note": "said"}))
    assert renamed.digest == base.digest
    finer = {**SMALL, "grid": {"spacing_mm": [1, 1, 0.5]}}
    assert load_design(write(folder / "f.toml", finer)).digest != base.digest
    (folder / "a.stl").write_bytes(b"two")
    assert load_design(write(folder / "d.toml", SMALL)).digest != base.digest


def test_inputs_are_digested(folder):
    (folder / "map.csv").write_text("1,2\n")
    data = deepcopy(SMALL)
    data["load_case"] = [
        {"name": "c", "duration_s": 1, "temperature_degC": 23, "cycles": 1,
         "load": [{"kind": "pressure map", "file": "map.csv", "unit": "kPa", "cell_mm": [1, 1],
                   "side": "z+", "first_cell_mm": [0, 0], "columns_grow": "x+",
                   "rows_grow": "y-"}]}
    ]  # fmt: skip
    design = load_design(write(folder / "d.toml", data))
    assert set(design.inputs) == {"d.toml", "a.stl", "map.csv"}
    # SHA-256 of "one", from the coreutils tool sha256sum
    assert design.inputs["a.stl"] == (
        "7692c3ad3540bb803c020b3aee66cd8887123234ea0c6e7143c0add73ff431ed"
    )


def test_supports_in_their_three_ways(folder):
    held = [{"fixed": True}, {"slide": ["x", "y"]}, {"displacement_mm": {"z": -0.5}}]
    case = {"name": "c", "duration_s": 1, "temperature_degC": 23, "cycles": 1}
    case["support"] = [{"region": "block", **h} for h in held]
    design = load_design(write(folder / "d.toml", {**SMALL, "load_case": [case]}))
    assert [s.displacement_mm for s in design.cases[0].supports] == [
        (0.0, 0.0, 0.0),
        (None, None, 0.0),
        (None, None, -0.5),
    ]


def test_bought_in_by_name_and_by_values(folder):
    data = deepcopy(SMALL)
    stated = {"E_MPa": 210000, "nu": 0.3, "density_g_cm3": 7.85}
    data["body"] += [
        {"name": "Screw 1", "mesh": "a.stl", "unit": "mm", "bought_in": stated},
        {"name": "rod", "mesh": "a.stl", "unit": "mm", "bought_in": {"name": "steel"}},
    ]
    screw, rod = (b.bought_in for b in load_design(write(folder / "d.toml", data)).bodies[1:])
    library = load_library()
    made = screw.material(library)
    assert made.name == "bought-in-screw-1"
    assert made.E.band == (210000.0, 210000.0)
    assert not made.indicative
    assert made.density.value == pytest.approx(7.85e-9, rel=1e-12)
    assert made.max_duration_s == math.inf
    assert rod.material(library) is library["steel"]


def test_the_schema_is_valid_and_says_what_the_code_says():
    schema = load_schema("design")
    Draft202012Validator.check_schema(schema)
    assert set(schema["properties"]["materials"]["properties"]["law"]["enum"]) == set(LAWS)
    requirement = schema["$defs"]["requirement"]
    assert requirement["properties"]["measure"]["enum"] == list(MEASURES)
    for branch in requirement["allOf"]:
        measure = branch["if"]["properties"]["measure"]["const"]
        unit = MEASURES[measure].replace("/", "_")
        assert f"at_most_{unit}".rstrip("_") in branch["then"]["properties"]
    for side in schema["$defs"]["side"]["enum"]:
        parse_side(side, "test")
    text = files("voxelmat.io").joinpath("schemas/design.json").read_text("utf-8")
    assert json.loads(text) == schema


def test_parse_reads_no_file(tmp_path):
    assert parse_design(SMALL).name == "small"
    text = write(tmp_path / "d.toml", SMALL).read_text()
    assert parse_design(tomllib.loads(text)).bodies[0].blend == {"rigid-general": 1.0}

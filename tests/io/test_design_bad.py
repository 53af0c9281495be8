"""Every fault of a design file is refused in words that name the file and the key."""

from __future__ import annotations

import json
from copy import deepcopy

import pytest

from voxelmat.errors import FileFormatError, InputError
from voxelmat.io.design import load_design, parse_design

GOOD = {
    "format": 1,
    "name": "pad",
    "grid": {"spacing_mm": [1.0, 1.0, 1.0]},
    "body": [
        {"name": "core", "mesh": "a.stl", "unit": "mm", "resin": "rigid-general"},
        {"name": "pad", "mesh": "a.stl", "unit": "mm", "resin": "elastomer-a40"},
        {"name": "rod", "mesh": "a.stl", "unit": "mm", "bought_in": {"name": "steel"}},
    ],
    "gaps": {"close_below_mm": 0.1, "give_to": "pad"},
    "region": [{"name": "top", "kind": "face", "side": "z+"}],
    "layout": [
        {"region": "pad", "kind": "axis gradient", "axis": "z", "range_mm": [0, 1],
         "from": {"rigid-general": 1}, "to": {"elastomer-a40": 1}},
    ],
    "load_case": [
        {"name": "push", "duration_s": 1.0, "temperature_degC": 23.0, "cycles": 1,
         "support": [{"region": "core", "fixed": True}],
         "load": [
             {"kind": "pressure map", "region": "top", "file": "map.csv", "unit": "kPa",
              "cell_mm": [1, 1], "side": "z+", "first_cell_mm": [0, 0], "columns_grow": "x+",
              "rows_grow": "y-"},
             {"kind": "spring", "region": "top", "stiffness_N_mm": [0, 0, 1]},
         ]},
    ],
    "target": [{"name": "give", "region": "top", "load_case": "push", "direction": "z-",
                "deflection_mm": 0.5}],
    "requirement": [
        {"name": "sinks", "measure": "displacement", "load_case": "push", "region": "top",
         "at_most_mm": 1.0},
        {"name": "as asked", "measure": "deflection error", "target": "give", "at_most_mm": 0.1},
    ],
    "optimise": {"resins": ["rigid-general", "elastomer-a40"], "objective": "target deflection",
                 "target": "give", "filter_radius_mm": 2.0,
                 "limit": [{"kind": "resin", "resin": "rigid-general", "at_most_fraction": 0.5}]},
    "print": {"profile": "invented-standard", "orientation": ["x 90"]},
}  # fmt: skip

MAP = ("load_case", 0, "load", 0)


def changed(path, value):
    """The good design with one value put at a path; `None` takes the key away."""
    data = deepcopy(GOOD)
    at = data
    for step in path[:-1]:
        at = at[step]
    if value is None:
        del at[path[-1]]
    else:
        at[path[-1]] = value
    return data


def test_the_good_one_is_good():
    assert parse_design(GOOD).name == "pad"


BAD = [
    # unknown keys, with the nearest known one
    (("grid", "spacing"), [1, 1, 1], "grid.spacing", "Did you mean 'spacing_mm'"),
    (("boddy",), [], "boddy", "Did you mean 'body'"),
    (("region", 0, "deph_mm"), 1, "region[0].deph_mm", "Did you mean 'depth_mm'"),
    ((*MAP, "expected_force"), 1, "load_case[0].load[0].expected_force",
     "Did you mean 'expected_force_N'"),
    (("requirement", 0, "at_most_N"), 1, "requirement[0].at_most_N", "Did you mean 'at_most_mm'"),
    (("optimise", "filter_radius"), 1, "optimise.filter_radius", "'filter_radius_mm'"),
    # missing keys
    (("grid",), None, "grid", "missing"),
    (("body", 0, "mesh"), None, "body[0].mesh", "missing"),
    (("load_case", 0, "temperature_degC"), None, "load_case[0].temperature_degC", "missing"),
    ((*MAP, "side"), None, "load_case[0].load[0].side", "missing"),
    ((*MAP, "unit"), None, "load_case[0].load[0].unit", "a table needs it"),
    # types and ranges
    (("name",), 7, "name", "must be text; got 7"),
    (("grid", "spacing_mm"), 0.5, "grid.spacing_mm", "must be a list; got 0.5"),
    (("grid", "spacing_mm"), [1, 1], "grid.spacing_mm", "at least 3"),
    (("grid", "spacing_mm", 1), 0, "grid.spacing_mm[1]", "above 0"),
    (("grid", "spacing_mm", 1), -0.5, "grid.spacing_mm[1]", "above 0"),
    (("grid", "spacing_mm", 1), float("nan"), "grid.spacing_mm[1]", "must be finite"),
    (("load_case", 0, "duration_s"), float("inf"), "load_case[0].duration_s", "must be finite"),
    (("load_case", 0, "cycles"), 1.5, "load_case[0].cycles", "whole number"),
    (("load_case", 0, "temperature_degC"), -300, "load_case[0].temperature_degC", "above -273.15"),
    (("body", 0, "unit"), "mil", "body[0].unit", "mm, cm, m"),
    (("region", 0, "kind"), "boxx", "region[0].kind", "must be one of box"),
    (("region", 0, "side"), "up", "region[0].side", "x-, x+"),
    ((*MAP, "unit"), "kpa", "load_case[0].load[0].unit", "Pa, kPa, MPa"),
    (("requirement", 0, "measure"), "height", "requirement[0].measure", "must be one of"),
    (("materials",), {"law": "guess"}, "materials.law", "must be one of calibrated"),
    # names that nothing bears
    (("layout", 0, "region"), "pat", "layout[0].region", "Did you mean 'pad'"),
    (("load_case", 0, "support", 0, "region"), "tip", "load_case[0].support[0].region",
     "no region or body called 'tip'.*'top'"),
    (("requirement", 0, "load_case"), "pull", "requirement[0].load_case", "Did you mean 'push'"),
    (("requirement", 1, "target"), "take", "requirement[1].target", "no target called 'take'"),
    (("gaps", "give_to"), "padd", "gaps.give_to", "Did you mean 'pad'"),
    (("gaps", "give_to"), "rod", "gaps.give_to", "printed"),
    (("optimise", "limit", 0, "resin"), "x", "optimise.limit[0].resin", "optimise.resins"),
    (("optimise", "keep"), ["topp"], "optimise.keep[0]", "Did you mean 'top'"),
    # choices that exclude each other
    (("body", 0, "blend"), {"rigid-general": 1}, "body[0]", "exactly one of resin, blend"),
    (("body", 0, "resin"), None, "body[0]", "got none"),
    (("body", 0, "unit"), None, "body[0].unit", "does not state its unit"),
    (("body", 0, "clearance_mm"), 0.1, "body[0].clearance_mm", "only a bought-in body"),
    (("body", 2, "bought_in"), {"E_MPa": 1000}, "body[2].bought_in.nu", "density_g_cm3"),
    (("body", 2, "bought_in", "nu"), 0.5, "body[2].bought_in.nu", "below 0.5"),
    (("body", 2, "bought_in", "E_MPa"), -1, "body[2].bought_in.E_MPa", "above 0"),
    (("body", 1, "name"), "core", "body[1].name", "given twice"),
    (("region", 0, "name"), "core", "region[0].name", "body is called 'core' too"),
    (("layout", 0, "range_mm"), [1, 1], "layout[0].range_mm", "must differ"),
    (("load_case", 0, "support", 0, "slide"), ["x"], "load_case[0].support[0]", "exactly one"),
    (("load_case", 0, "load", 1, "stiffness_N_mm"), [0, 0, 0],
     "load_case[0].load[1].stiffness_N_mm", "above 0"),
    ((*MAP, "white_MPa"), 1, "load_case[0].load[0].white_MPa", "leave white_MPa out"),
    ((*MAP, "columns_grow"), "y+", "load_case[0].load[0].columns_grow", "three different axes"),
    ((*MAP, "columns_grow"), "x-", "load_case[0].load[0].columns_grow", "lies mirrored"),
    ((*MAP, "rows_grow"), "y+", "load_case[0].load[0].columns_grow", "lies mirrored"),
    ((*MAP, "side"), "z-", "load_case[0].load[0].columns_grow", "as seen from inside"),
    (("target", 0, "file"), "map.csv", "target[0]", "exactly one of deflection_mm and file"),
    (("target", 0, "side"), "z+", "target[0].side", "goes with file"),
    (("requirement", 0, "at_most_mm"), None, "requirement[0]", "needs at_least_mm or at_most_mm"),
    (("requirement", 0, "at_least_mm"), 2.0, "requirement[0].at_least_mm", "nothing is both"),
    (("optimise", "target"), None, "optimise.target", "names a target"),
    (("optimise", "resins"), ["rigid-general"], "optimise.resins", "nothing to choose"),
    (("print", "orientation"), ["x 45"], "print.orientation[0]", "multiples of 90"),
    (("print", "orientation"), ["up"], "print.orientation[0]", "not written as it should be"),
    (("format",), 2, "format", "newer voxelmat"),
    (("format",), 0, "format", "at least 1"),
]  # fmt: skip


@pytest.mark.parametrize(
    ("path", "value", "key", "said"), BAD, ids=[f"{b[2]}: {b[3]}" for b in BAD]
)
def test_refused_with_key(path, value, key, said):
    with pytest.raises(InputError, match=said) as caught:
        parse_design(changed(path, value))
    assert caught.value.key == key


def test_a_mirrored_map_may_be_meant():
    data = changed((*MAP, "rows_grow"), "y+")
    data["load_case"][0]["load"][0]["seen_from"] = "inside"
    assert parse_design(data).cases[0].loads[0].settings["rows_grow"] == "y+"


# ------------------------------------------------------------------ files
def toml(value):
    if isinstance(value, dict):
        return "{" + ", ".join(f"{json.dumps(k)} = {toml(v)}" for k, v in value.items()) + "}"
    if isinstance(value, list):
        return "[" + ", ".join(toml(v) for v in value) + "]"
    return json.dumps(value)


@pytest.fixture
def load(tmp_path):
    (tmp_path / "a.stl").write_bytes(b"mesh")
    (tmp_path / "map.csv").write_text("1,2\n")

    def run(data):
        path = tmp_path / "design.toml"
        path.write_text("".join(f"{k} = {toml(v)}\n" for k, v in data.items()))
        return load_design(path)

    return run


def test_the_good_file_is_good(load):
    assert load(GOOD).inputs.keys() == {"design.toml", "a.stl", "map.csv"}


@pytest.mark.parametrize(
    ("path", "value", "key", "said"),
    [
        (("body", 1, "mesh"), "b.stl", "body[1].mesh", "no file 'b.stl'"),
        ((*MAP, "file"), "other.csv", "load_case[0].load[0].file", "no file 'other.csv'"),
        (("print", "profile"), "mine.toml", "print.profile", "no file 'mine.toml'"),
        (("materials",), {"files": ["r.toml"]}, "materials.files[0]", "no file 'r.toml'"),
        (("body", 0, "resin"), "rigid-genral", "body[0]", "Did you mean 'rigid-general'"),
        (("body", 0, "resin"), "support-soluble", "body[0]", "washed away"),
        (("body", 0, "resin"), "steel", "body[0]", "not printed; write bought_in"),
        (("body", 2, "bought_in"), {"name": "stel"}, "body[2].bought_in.name", "give E_MPa"),
        (("body", 2, "bought_in"), {"name": "rigid-general"}, "body[2].bought_in.name", "a resin"),
        (("body", 2, "bought_in"),
         {"name": "steel", "E_MPa": 1, "nu": 0.3, "density_g_cm3": 1},
         "body[2].bought_in.name", "choose another name"),
        (("layout", 0, "to"), {"elastomer": 1}, "layout[0].to", "no material 'elastomer'"),
        (("optimise", "resins"), ["rigid-general", "rubber"], "optimise.resins[1]", "'rubber'"),
    ],
)  # fmt: skip
def test_what_a_file_names_must_be_there(load, path, value, key, said):
    data = changed(path, value)
    if key == "optimise.resins[1]":
        data["optimise"]["limit"] = []
    with pytest.raises(InputError, match=said) as caught:
        load(data)
    assert caught.value.key == key
    assert caught.value.file.endswith("design.toml")


def test_not_a_design(tmp_path):
    with pytest.raises(InputError, match="no such file"):
        load_design(tmp_path / "none.toml")
    (tmp_path / "d.toml").write_text("format = = 1")
    with pytest.raises(FileFormatError, match="not valid TOML"):
        load_design(tmp_path / "d.toml")


def test_a_fault_in_the_users_material_names_that_file(load, tmp_path):
    (tmp_path / "mine.toml").write_text('name = "mine"\n')
    with pytest.raises(InputError) as caught:
        load(changed(("materials",), {"files": ["mine.toml"]}))
    assert caught.value.file.endswith("mine.toml")

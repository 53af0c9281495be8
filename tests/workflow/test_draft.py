"""A design under edit: changes, undo, autosave, saving with comments kept."""

import json
import tomllib

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.workflow.draft import Draft
from voxelmat.workflow.draft_keys import add_at, get_at, remove_at, set_at
from voxelmat.workflow.draft_steps import difference, patched
from voxelmat.workflow.draft_toml import updated_toml


def _press(draft, value):
    draft.change("pressure", lambda d: set_at(d, "load_case[0].load[0].pressure_MPa", value))


def test_undo_and_redo_go_through_every_change(design):
    draft = Draft(design)
    first = draft.data
    _press(draft, 0.03)
    _press(draft, 0.04)
    assert draft.undo_label == "pressure"
    draft.undo()
    assert get_at(draft.data, "load_case[0].load[0].pressure_MPa") == 0.03
    draft.undo()
    assert draft.data == first
    assert draft.undo() == ""
    draft.redo()
    draft.redo()
    assert draft.design.cases[0].loads[0].settings["pressure_MPa"] == 0.04
    assert draft.redo() == ""


def test_what_was_put_in_is_not_the_callers_any_more(design):
    draft = Draft(design)
    spacing = [2.0, 2.0, 2.0]
    draft.change("voxels", lambda d: set_at(d, "grid.spacing_mm", spacing))
    spacing[0] = 0.5
    region = {"name": "spot", "kind": "face", "side": "x-"}
    draft.change("region", lambda d: add_at(d, "region", region))
    region["side"] = "x+"
    assert draft.data["grid"]["spacing_mm"] == [2.0, 2.0, 2.0]
    assert draft.data["region"][-1]["side"] == "x-"
    before = draft.data
    draft.change("seed", lambda d: set_at(d, "seed", 8))
    assert before["seed"] == 3  # what was read stays what it was


def test_a_refused_change_leaves_everything(design):
    draft = Draft(design)
    before = draft.data
    with pytest.raises(InputError, match="spacing"):
        draft.change("voxels", lambda d: set_at(d, "grid.spacing_mm", [0.0, 1.0, 1.0]))
    with pytest.raises(InputError, match="no 'nowhere'"):
        draft.change("region", lambda d: remove_at(d, "nowhere[0]"))
    assert draft.data == before
    assert draft.undo_label == ""


def test_a_crash_loses_nothing(design):
    draft = Draft(design)
    _press(draft, 0.03)
    _press(draft, 0.05)
    draft.undo()
    draft.view["tab"] = "whole"
    draft.autosave()
    again = Draft(design)  # the first was never closed or saved
    assert again.data == draft.data
    assert again.unsaved
    assert "Unsaved changes" in again.notices[0]
    assert again.view == {"tab": "whole"}
    again.redo()
    assert get_at(again.data, "load_case[0].load[0].pressure_MPa") == 0.05
    again.undo()
    again.undo()
    assert not again.unsaved


def test_an_autosave_of_another_file_is_put_aside(design):
    draft = Draft(design)
    _press(draft, 0.03)
    design.write_text(design.read_text().replace("0.02", "0.01"))
    again = Draft(design)
    assert get_at(again.data, "load_case[0].load[0].pressure_MPa") == 0.01
    assert "kept in" in again.notices[0]
    kept = next(design.parent.glob(".*.old.json"))
    assert get_at(json.loads(kept.read_text())["data"], "load_case[0].load[0].pressure_MPa") == 0.03


def test_a_damaged_autosave_is_said(design):
    Draft(design).change("seed", lambda d: set_at(d, "seed", 5))
    next(design.parent.glob(".*.draft.json")).write_text("{")
    again = Draft(design)
    assert not again.unsaved
    assert "could not be taken up" in again.notices[0]


def test_saving_keeps_comments_and_refuses_a_file_changed_elsewhere(design):
    design.write_text("# why this part\n" + design.read_text())
    draft = Draft(design)
    _press(draft, 0.03)
    draft.change("name", lambda d: set_at(d, "name", "another"))
    draft.save()
    text = design.read_text()
    assert text.startswith("# why this part")
    assert tomllib.loads(text) == draft.data
    assert not draft.unsaved
    design.write_text(text.replace("0.03", "0.07"))
    _press(draft, 0.04)
    with pytest.raises(InputError, match="changed since"):
        draft.save()
    assert "0.07" in design.read_text()
    draft.save(overwrite=True)
    assert Draft(design).data == draft.data


def test_a_design_of_a_newer_version_is_refused(design):
    design.write_text(design.read_text().replace("format = 1", "format = 2", 1))
    with pytest.raises(InputError, match="newer voxelmat"):
        Draft(design)


def test_a_new_design_starts_empty(tmp_path):
    draft = Draft(tmp_path / "fresh.toml")
    assert draft.empty
    with pytest.raises(InputError, match="no body yet"):
        draft.design  # noqa: B018
    assert not (tmp_path / "fresh.toml").exists()


def test_a_thousand_steps_share_what_did_not_change(design):
    draft = Draft(design)
    for n in range(30):
        _press(draft, 0.02 + 0.001 * (n + 1))
    regions = {id(step.data["region"]) for step in draft._undo}
    assert len(regions) == 1


JSON = st.recursive(
    st.none() | st.booleans() | st.integers(-3, 3) | st.sampled_from(["a", "b"]),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.sampled_from("abc"), inner),
    max_leaves=8,
)
TABLES = st.dictionaries(st.sampled_from("abcd"), JSON)


@settings(max_examples=60, deadline=None)
@given(TABLES, TABLES)
def test_a_step_is_what_it_changed(start, end):
    change = json.loads(json.dumps(difference(start, end)))
    assert patched(start, change) == end


def test_an_autosave_holds_a_long_painting_once(design):
    draft = Draft(design)
    path = [[0.1 * n, 2.0, 3.0] for n in range(40)]
    for n in range(30):
        rule = {"kind": "stroke", "brush": "sphere", "radius_mm": 1.0 + n, "path_mm": path}
        rule["blend"] = {"measured-hard": 1.0}
        draft.change("stroke", lambda d, rule=rule: add_at(d, "layout", rule))
    draft.undo()
    kept = next(design.parent.glob(".*.draft.json")).stat().st_size
    assert kept < 3 * len(json.dumps(draft.data, indent=2))  # 30 copies would be some 15 times it
    again = Draft(design)
    for _ in range(29):
        again.undo()
        draft.undo()
    assert again.data == draft.data
    for _ in range(30):
        again.redo()
        draft.redo()
    assert again.data == draft.data


def test_a_read_only_folder_is_a_notice_and_no_loss(design, monkeypatch):
    from voxelmat.errors import ResourceError

    draft = Draft(design)

    def refuse(path, value):
        raise ResourceError("the folder may not be written to")

    monkeypatch.setattr("voxelmat.workflow.draft.write_json", refuse)
    _press(draft, 0.03)
    assert get_at(draft.data, "load_case[0].load[0].pressure_MPa") == 0.03
    assert any("not kept" in n for n in draft.notices)


@pytest.mark.parametrize(
    "change",
    [
        lambda d: set_at(d, "region[0].side", "y-"),
        lambda d: remove_at(d, "region[0]"),
        lambda d: remove_at(d, "load_case[0].load"),
        lambda d: add_at(d, "region", {"name": "spot", "kind": "box", "low_mm": [0, 0, 0]}),
        lambda d: set_at(d, "materials", {"law": "voigt"}),
        lambda d: set_at(d, "invented", 1),
        lambda d: set_at(d, "grid", [1, 2]),
        lambda d: add_at(d, "load_case[0].load", {"kind": "force", "to": {"a": 1.5, "b": []}}),
    ],
)
def test_toml_reads_back_what_was_put_in(design, change):
    text = design.read_text()
    data = tomllib.loads(text)
    change(data)
    back = tomllib.loads(updated_toml(text, data))
    assert back == data
    assert json.dumps(back, sort_keys=True) == json.dumps(data, sort_keys=True)

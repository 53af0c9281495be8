"""Printing on the bench: what is asked goes into the design, exports are those of the pipeline."""

import json

import pytest

from voxelmat.errors import InputError
from voxelmat.printing.readback import read_stack
from voxelmat.workbench.bench import Workbench
from voxelmat.workflow.pipeline import run


@pytest.fixture
def bench(small_design):
    bench = Workbench(small_design)
    bench.answers.set_live(False)
    yield bench
    bench.close()


def test_an_export_is_that_of_the_pipeline(bench, small_design, tmp_path):
    found = bench.printing.export().wait(200)
    assert found.stack.folder == bench.printing.folder / "stack"
    batch = run(small_design, tmp_path / "batch", stages=("stack",))
    for name in ("manifest.json",):
        ours = json.loads((found.stack.folder / name).read_text())
        theirs = json.loads((batch.stack.folder / name).read_text())
        assert ours["job"] == theirs["job"]
        assert ours["channels"] == theirs["channels"]
    rows = [c for c in bench.printing.controls() if c["kind"] == "table"]
    assert len(rows[-1]["rows"]) == len(bench.printing.findings)
    bench.printing.show_layers()
    path = bench.printing.ticket()
    assert path.read_text("utf-8").lstrip().startswith("<!")
    bench.sections["printing"].act("manifest", None)
    name, data = bench.outbox.pop()
    assert name == "manifest.json"
    assert json.loads(data)["job"] == ours["job"]


def test_estimates_and_turns(bench):
    found = bench.printing.forecast().wait(100)
    assert found.layers > 10
    turns = bench.printing.compare_turns().wait(200)
    section = bench.sections["printing"]
    section.act("turned", ["choose", 1])
    assert bench.design.printing.orientation == tuple(turns.choices[1].orientation)
    stale = [c["stale"] for c in section.controls() if c["kind"] == "table" and "stale" in c]
    assert stale
    assert all(stale)
    section.act("support", "none")
    assert bench.design.printing.support == "none"
    section.act("support", "as the profile says")
    assert bench.design.printing.support is None


def test_without_a_profile_and_with_a_bad_one(bench):
    bench.remove("print")
    with pytest.raises(InputError, match="profile first"):
        bench.printing.export()
    with pytest.raises(InputError, match="invented-standard"):
        bench.printing.profile("no-such")
    assert "print" not in bench.draft.data
    bench.sections["printing"].act("profile", "invented-fine")
    assert bench.design.printing.profile == "invented-fine"


def test_findings_lead_to_their_place(bench):
    bench.printing.export().wait(200)
    stack = bench.printing.stack
    from voxelmat.model.finding import Finding

    bench.printing.findings = (
        Finding(severity="warn", code="test", message="here", place_mm=(6.0, 4.0, 3.0)),
        Finding(severity="note", code="test", message="nowhere"),
    )
    png = bench.printing.show_finding(0)
    assert png[:4] == b"\x89PNG"
    assert bench.picked["place_mm"] == (6.0, 4.0, 3.0)
    assert bench.printing.show_finding(1) == b""
    with pytest.raises(InputError, match="2 findings"):
        bench.printing.show_finding(2)
    again = bench.printing.open_stack(str(stack.folder))
    assert read_stack(again.folder).manifest == stack.manifest

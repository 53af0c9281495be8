"""What a run and `voxelmat preflight` check, measure and write beside a stack, and its repairs."""

import json

import numpy as np
import pytest

from voxelmat.cli import main
from voxelmat.io.mesh import write_stl
from voxelmat.shape.solid import box
from voxelmat.workflow.build import bodies_of, build
from voxelmat.workflow.checking import meshes_of

LENGTH = """
[[dimension]]
name = "length"
kind = "outside"
nominal_mm = {nominal}
lower_mm = -0.1
upper_mm = 0.1
point_mm = [6.0, 4.0, 3.0]
direction = [1.0, 0.0, 0.0]
"""


def asked(capsys, *words):
    code = main([*map(str, words), "--json", "--quiet"])
    return code, json.loads(capsys.readouterr().out)


@pytest.fixture
def stacked(design, tmp_path, capsys):
    """The pad with one dimension that is 12 mm and asked to be 13, and its stack."""
    design.write_text(design.read_text() + LENGTH.format(nominal=13.0))
    code, data = asked(capsys, "stack", design, "--out", tmp_path / "out")
    assert code == 0
    return design, tmp_path / "out", data


def test_a_run_measures_and_writes_papers(stacked, capsys):
    design, out, data = stacked
    (row,) = data["inspection"]
    # The pad is 12 mm long (its mesh); two crossings, each off by at most half a pitch of 42.3 um.
    assert row["measured"] == pytest.approx(12.0, abs=0.0425)
    assert row["state"] == "out of tolerance"
    (finding,) = [f for f in data["findings"] if f["code"] == "dimension"]
    assert (finding["value"], finding["limit"], finding["unit"]) == (row["measured"], 13.0, "mm")
    assert data["outline"]["against"] == "the mesh of 2 bodies"
    assert data["outline"]["rows"][0]["p95_mm"] <= data["outline"]["limit_p95_mm"]
    assert "length,outside,mm,13.0" in (out / "inspection.csv").read_text()
    assert (out / "bom.csv").read_text().startswith("resin,channels,role")
    assert "Job ticket" in (out / "ticket.html").read_text("utf-8")
    assert set(data["papers"]) == {"bill of materials", "inspection", "ticket"}
    assert not [p for p in (out / "stack").iterdir() if p.suffix in (".html", ".csv")]

    asked(capsys, "report", design, "--out", out)
    page = (out / "report.html").read_text("utf-8")
    for words in ("length", "out of tolerance", "Finding 1", "the mesh of 2 bodies", "needed, g"):
        assert words in page

    text = design.read_text().replace(LENGTH.format(nominal=13.0), "")
    design.write_text(text)
    _, again = asked(capsys, "stack", design, "--out", out)
    assert again["inspection"] is None
    assert not (out / "inspection.csv").exists()  # of the earlier state


def test_preflight_with_the_design(stacked, capsys):
    design, out, data = stacked
    code, found = asked(capsys, "preflight", out / "stack", "--design", design, "--out", out)
    assert code == 0
    assert found["findings"] == data["findings"]
    assert found["outline"] == data["outline"]
    assert found["inspection"] == data["inspection"]
    main(["preflight", str(out / "stack"), "--design", str(design), "--out", str(out), "--quiet"])
    text = capsys.readouterr().out
    assert "Outline against the mesh of 2 bodies" in text
    assert "'length' measures 12" in text
    code, bare = asked(capsys, "preflight", out / "stack")
    assert (code, bare["outline"], bare["inspection"]) == (0, None, None)


def test_shallow_leaves_out_what_is_judged_in_space(design, tmp_path, capsys):
    write_stl(box((0.3, 8.0, 4.0), (4.1, 0.0, 2.0)), tmp_path / "pad.stl")  # a wall of 0.3 mm
    design.write_text(design.read_text().replace("[1.0, 1.0, 1.0]", "[0.3, 0.3, 0.3]"))
    out = tmp_path / "out"
    asked(capsys, "stack", design, "--out", out)
    _, deep = asked(capsys, "preflight", out / "stack")
    _, shallow = asked(capsys, "preflight", out / "stack", "--shallow")
    codes = [{f["code"] for f in d["findings"]} for d in (deep, shallow)]
    assert "wall under minimum" in codes[0]
    assert "wall under minimum" not in codes[1]
    assert "thin wall or strut" in codes[1]
    assert all(f["fix"] == "thicken" for f in deep["findings"] if f["code"] == "wall under minimum")


@pytest.mark.usefixtures("hollow_pad")
def test_fix_by_preflight_is_fix(design, tmp_path, capsys):
    out = tmp_path / "out"
    asked(capsys, "stack", design, "--out", out)
    words = [out / "stack", "--design", design, "--out", out, "--drain", "6,4,4:0,1,0:1.5"]
    code, data = asked(capsys, "preflight", *words, "--fix")
    assert code == 0
    assert [s["name"] for s in data["steps"]] == ["drain"]
    code, again = asked(capsys, "fix", *words)
    assert again["findings"] == data["findings"]
    first, second = (np.load(out / f"part.fixed{n}.npz")["labels"] for n in ("", "-2"))
    assert (first == second).all()


@pytest.mark.parametrize(
    ("words", "key"),
    [(["--fix"], "--fix"), (["--drain", "0,0,0:0,0,1"], "--drain")],
)
def test_a_repair_needs_its_words(tmp_path, capsys, words, key):
    code, data = asked(capsys, "preflight", tmp_path / "stack", *words)
    assert (code, data["key"]) == (3, key)


def test_meshes_are_those_of_the_outline(design):
    built = build(design)
    assert [b.name for b in meshes_of(built, built.part)] == [b.name for b in built.bodies]
    assert [b.name for b in bodies_of(built.design)] == [b.name for b in built.bodies]
    distance = built.part.distance.copy(order="F")
    distance[5, 4, 3] = 10
    assert meshes_of(built, built.part.replace(distance=distance)) == ()

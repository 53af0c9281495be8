"""The print room from the shell: ticket, proof print, record, test kit; and what is refused."""

import csv
import json
import tomllib
from datetime import date

import pytest
from print_twins import layered_part

from voxelmat.cli import main
from voxelmat.errors import InputError
from voxelmat.printing.bill import BillRow
from voxelmat.printing.estimate import estimate
from voxelmat.printing.profile import load_profile
from voxelmat.printing.readback import read_stack
from voxelmat.printing.stack import write_stack
from voxelmat.workflow.ticket import RESERVE, Loaded, ticket_warnings, write_ticket
from voxelmat.workflow.topview import tray_drawing

DAY = date(2026, 12, 1)


@pytest.fixture(scope="module")
def written(tmp_path_factory):
    folder = tmp_path_factory.mktemp("room") / "stack"
    notes = {"job_number": "J-7 <test>", "title": "grip & co"}
    part = layered_part("distance", shape=(12, 10, 8), pure=True)
    write_stack(part, load_profile("invented-standard"), folder, notes=notes, threads=1)
    return folder


def run(capsys, *words):
    code = main([*map(str, words), "--json", "--quiet"])
    return code, json.loads(capsys.readouterr().out)


def row(needed, **given):
    plain = {
        "resin": "hard", "channels": ("m1",), "role": "model", "volume_mm3": 1.0, "droplets": 1.0,
        "density_g_cm3": 1.1, "density_assumed": False, "printed_g": needed, "waste_g": 0.0,
        "purge_g": 0.0, "needed_g": needed, "cost_per_kg": None, "cost": None, "cost_unit": "",
    }  # fmt: skip
    return BillRow(**{**plain, **given})


@pytest.mark.parametrize(
    ("held", "kinds", "said"),
    [
        (Loaded(grams=200, lot="L", expiry=DAY), [], ""),
        (Loaded(grams=99.9, lot="L"), ["stop"], "too little"),
        (Loaded(grams=100 * (1 + RESERVE) - 1, lot="L"), ["warn"], "in reserve"),
        (Loaded(grams=200, lot="L", expiry=date(2026, 11, 30)), ["stop"], "expired on 2026-11-30"),
        (Loaded(lot="L"), ["warn"], "not stated"),
        (Loaded(grams=200), ["note"], "no lot"),
    ],
)
def test_what_the_ticket_warns_of(held, kinds, said):
    found = ticket_warnings([row(100.0)], {"hard": held}, DAY)
    assert [k for k, _ in found] == kinds
    assert said in " ".join(t for _, t in found)


def test_support_and_model_of_one_resin_are_added():
    rows = [row(60.0), row(60.0, role="support", channels=("s",))]
    found = ticket_warnings(rows, {"hard": Loaded(grams=100, lot="L")}, DAY)
    assert found[0][0] == "stop"
    assert "120 g needed; 20 g too little" in found[0][1]


def test_ticket_page_and_bill(written, capsys):
    code, data = run(
        capsys, "ticket", written, "--loaded", "hard=500", "--loaded", "soft=1",
        "--expiry", "hard=2020-01-31", "--lot", "hard=A/7", "--lot", "soft=B",
    )  # fmt: skip
    assert code == 1
    page = written.with_name("stack.ticket.html").read_text("utf-8")
    wanted = (
        "J-7 &lt;test&gt;", "grip &amp; co", "too little", "expired", "A/7", "2020-01-31",
        "check_stack.py", "Uncured resin", "Skin", "Load", "Sign-off", "origin front left",
    )  # fmt: skip
    for text in wanted:
        assert text in page, text
    assert "src=" not in page.replace('src="data:', "")
    assert "http" not in page.replace("http://www.w3.org/2000/svg", "")
    figures = estimate(read_stack(written))
    with written.with_name("stack.bom.csv").open(newline="", encoding="utf-8") as handle:
        table = {r["resin"]: float(r["needed_g"]) for r in csv.DictReader(handle)}
    assert table == pytest.approx({r.resin: r.needed_g for r in figures.bill}, rel=1e-4)
    assert data["needed_g"] == pytest.approx({r.resin: r.needed_g for r in figures.bill})
    assert data["time_s"] == pytest.approx(list(figures.time_s))
    assert {p.name for p in written.iterdir()} == {
        "SHA256SUMS", "check_stack.py", "manifest.json", "m1", "m2", "support"
    }  # fmt: skip


def test_a_stack_that_may_not_be_printed_says_so(written, tmp_path):
    from voxelmat.model.finding import Finding

    stop = Finding(severity="stop", code="x", message="y")
    stack = read_stack(written)
    found = write_ticket(stack, tmp_path / "t.html", day=DAY, findings=[stop])
    assert ("stop", "The check of the stack says: do not print.") in found
    found = write_ticket(stack, tmp_path / "t.html", day=DAY)
    assert ("warn", "The stack was not checked when this ticket was made.") in found


@pytest.mark.parametrize("corner", ["front left", "front right", "back left", "back right"])
@pytest.mark.parametrize("rows", ["x", "y"])
def test_the_origin_is_drawn_in_its_corner(tmp_path, corner, rows):
    profile = load_profile("invented-standard").replace(origin_corner=corner, row_direction=rows)
    part = layered_part("distance", shape=(5, 5, 3), pure=True)
    drawn = tray_drawing(write_stack(part, profile, tmp_path / "s", support="none", threads=1))
    assert f"origin {corner}; rows run along {rows}" in drawn
    x = float(drawn.split('<circle cx="')[1].split('"')[0])
    y = float(drawn.split(' cy="')[1].split('"')[0])
    width, depth = profile.tray_size[:2]
    pad = 8.5 * max(width, depth) / 100
    assert x == pytest.approx(pad + (width if "right" in corner else 0))
    assert y == pytest.approx(pad + (0 if "back" in corner else depth))  # y of SVG runs down


def test_proof_from_the_shell(written, capsys, tmp_path):
    code, data = run(capsys, "proof", written, "--out", tmp_path / "p", "--first", "--height-mm", 1)
    assert code == 0
    assert data["layers"] == [0, 33]
    assert data["printing_s"] <= 1800
    assert read_stack(tmp_path / "p").n_layers == 33
    code, data = run(capsys, "proof", written, "--out", tmp_path / "q", "--minutes", 5)
    assert code == 0
    assert read_stack(tmp_path / "q").manifest["notes"]["crop_words"] == data["why"]
    assert data["printing_s"] <= 300


def test_record_from_the_shell(written, capsys):
    code, data = run(
        capsys, "record", written, "--operator", "print room", "--started", "2026-12-01T08:30",
        "--lot", "hard=A", "--lot", "soft=B", "--lot", "support=C", "--mass-g", "900",
        "--measured", "width=10:10.12", "--note", "first",
    )  # fmt: skip
    assert code == 1
    assert [f["code"] for f in data["findings"]] == ["mass"]
    code, data = run(capsys, "record", written)
    assert code == 0
    assert data["records"][0]["record"]["mass_g"] == 900
    assert data["records"][0]["record"]["started"] == "2026-12-01T08:30"
    assert main(["record", str(written)]) == 0
    text = capsys.readouterr().out
    assert "width 10.12 mm (+0.12)" in text
    assert "warn: mass" in text


def test_kit_and_back(tmp_path, capsys):
    code, data = run(capsys, "kit", "invented-coarse", "--out", tmp_path / "kit")
    assert code == 0
    assert read_stack(data["stack"]).manifest["notes"]["kit"] == data["kit"]
    page = (tmp_path / "kit" / "sheet.html").read_text("utf-8")
    assert "80: " not in page
    assert "height 80" in page
    sheet = tmp_path / "kit" / "sheet.csv"
    code, answer = run(capsys, "kit", "--read", sheet)
    assert code == 3
    assert "not filled in" in answer["error"]
    with sheet.open(newline="", encoding="utf-8") as handle:
        rows = list(csv.DictReader(handle))
    for line in rows:
        size = float(line["nominal_mm"])
        if line["kind"] == "dimension":
            line["measured_mm"] = f"{size + 0.16:.3f}"
        elif not line["made"]:
            line["made"] = "no" if line["kind"] == "wall" and size < 0.5 else "yes"
    with sheet.open("w", newline="", encoding="utf-8") as handle:
        table = csv.DictWriter(handle, rows[0].keys())
        table.writeheader()
        table.writerows(rows)
    # A filled sheet is not lost to a second kit in the same folder.
    assert run(capsys, "kit", "invented-coarse", "--out", tmp_path / "kit")[0] == 3
    code, answer = run(capsys, "kit", "--read", sheet, "--date", "2026-12-01")
    assert code == 0
    made = tmp_path / "kit" / "invented-coarse-2026-12-01.toml"
    new, old = load_profile(made), load_profile("invented-coarse")
    assert new.name == "invented-coarse-2026-12-01"
    assert new.minimum.wall == pytest.approx(0.6)
    assert new.bias == pytest.approx([b + 0.08 for b in old.bias], abs=1e-3)
    assert answer["bias_mm"] == list(new.bias)
    assert "2026-12-01" in tomllib.loads(made.read_text("utf-8"))["note"]
    kept = made.read_bytes()
    code, answer = run(capsys, "kit", "--read", sheet, "--date", "2026-12-01")
    assert code == 3
    assert "not overwritten" in answer["error"]
    assert made.read_bytes() == kept


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (("ticket", "STACK", "--loaded", "hard"), "RESIN=GRAMS"),
        (("ticket", "STACK", "--loaded", "hard=lots"), "is a number"),
        (("ticket", "STACK", "--loaded", "hard=-1"), "0 or more"),
        (("ticket", "STACK", "--loaded", "other=5"), "lays no 'other'"),
        (("ticket", "STACK", "--expiry", "hard=31.12.2026"), "A day is written"),
        (("ticket", "STACK", "--lot", "hard=a", "--lot", "hard=b"), "given twice"),
        (("proof", "STACK", "--minutes", "0.01"), "no proof print"),
        (("proof", "STACK", "--height-mm", "nan"), "above 0"),
        (("record", "STACK", "--mass-g", "5"), "needs --operator"),
        (("record", "STACK", "--operator", "a", "--measured", "w=3"), "DESIGN:MEASURED"),
        (("record", "STACK", "--operator", "a", "--lot", "other=3"), "lays no 'other'"),
        (("kit",), "either a profile"),
        (("kit", "no-such-profile"), "no print profile"),
        (("kit", "invented-coarse", "--scale", "9"), "usable tray"),
    ],
)
def test_bad_words(written, capsys, monkeypatch, tmp_path, words, said):
    monkeypatch.chdir(tmp_path)
    before = sorted(p.name for p in written.parent.iterdir())
    given = [str(written) if w == "STACK" else w for w in words]
    code, data = run(capsys, *given)
    assert code == 3
    assert said in data["error"]
    assert sorted(p.name for p in written.parent.iterdir()) == before
    assert list(tmp_path.iterdir()) == []


def test_loaded_grams_are_checked():
    with pytest.raises(InputError, match="0 or more"):
        Loaded(grams=float("nan"))

"""The tray file and `voxelmat tray`: parts of designs, runs and stores printed together."""

import json

import numpy as np
import pytest

from voxelmat.cli import main
from voxelmat.errors import FileFormatError, InputError
from voxelmat.io.bigpart_write import save_big_part
from voxelmat.io.store import save_part
from voxelmat.io.trayfile import load_tray_file
from voxelmat.printing.readback import read_stack
from voxelmat.workflow.build import build
from voxelmat.workflow.report_tray import tray_picture
from voxelmat.workflow.traying import tray_of

HEAD = """
format = 1
name = "pads"
invented = true
profile = "invented-coarse"
job_number = "J7"
spacing_mm = 3
seed = 4
"""


def tray_file(folder, parts, head=HEAD):
    path = folder / "tray.toml"
    path.write_text(head + parts)
    return path


@pytest.fixture
def pads(small_design):
    """A tray file of two designs made anew and one from a run's folder."""
    folder = small_design.parent
    (folder / "done").mkdir()
    save_part(build(small_design).part, folder / "done" / "part.npz")
    return tray_file(
        folder,
        """
        [[part]]
        design = "design.toml"
        name = "pad"
        copies = 2
        side = "left"

        [[part]]
        design = "design.toml"
        run = "done"
        name = "kept"
        position_mm = [70, 20]
        mark = "none"
        """,
    )


def test_a_tray_from_the_shell(pads, capsys):
    out = pads.parent / "out"
    code = main(["tray", str(pads), "--out", str(out), "--json", "--quiet"])
    answer = json.loads(capsys.readouterr().out)
    assert code == answer["exit_code"] == 0
    names = [p["name"] for p in answer["parts"]]
    assert names[:3] == ["pad 1", "pad 2", "kept"]
    assert sum(p["kind"] == "mark" for p in answer["parts"]) == 2
    assert sum(p["kind"] == "coupon" for p in answer["parts"]) == 4  # two of each of two resins
    kept = next(p for p in answer["parts"] if p["name"] == "kept")
    assert kept["position_mm"] == pytest.approx([70, 20], abs=0.1)
    assert not [f for f in answer["findings"] if f["severity"] == "stop"]
    assert any("no verdict is known" in n for n in answer["notes"])
    stack = read_stack(out / "stack")
    assert stack.manifest["notes"]["job_number"] == "J7"
    assert set(stack.manifest["inputs"]) == {"tray.toml", "design.toml"}
    assert {p.name for p in stack.parts} == set(names)
    assert json.loads((out / "tray.json").read_text())["parts"] == answer["parts"]
    assert (out / "tray.png").read_bytes().startswith(b"\x89PNG")
    # Called again, the finished stack stays as it is.
    before = (out / "stack" / "manifest.json").stat().st_mtime_ns
    assert main(["tray", str(pads), "--out", str(out), "--quiet"]) == 0
    assert "all marks in their places" in capsys.readouterr().out
    assert (out / "stack" / "manifest.json").stat().st_mtime_ns == before


def test_a_part_store_stands_on_a_tray_like_the_part(small_design):
    folder = small_design.parent
    part = build(small_design).part
    save_big_part(part, folder / "store", kind="maps")
    path = tray_file(folder, '[[part]]\nstore = "store"\norientation = ["x 90"]\nmay_turn = true\n')
    tray, _ = tray_of(load_tray_file(path))
    (item,) = tray.parts
    assert item.name == part.name
    low, high = (np.array(part.grid.origin), np.array(part.grid.upper))
    size = sorted(tray.box_mm(item)[2:])
    assert size[1] < (high - low).max() + 0.2


def test_a_protected_region_is_not_engraved(small_design):
    folder = small_design.parent
    row = '[[part]]\ndesign = "design.toml"\nmark = "engraved"\nmark_depth_mm = 0.5\n'
    head = HEAD.replace("coarse", "fine").replace('"J7"', '""')
    # The small pad has room for a mark of fine strokes, unless the face is protected.
    path = tray_file(folder, row + 'protected = ["nowhere"]\n', head)
    with pytest.raises(InputError, match="no region 'nowhere'"):
        tray_of(load_tray_file(path))
    path = tray_file(folder, row + 'protected = ["bottom"]\nface = "z-"\n', head)
    tray, notes = tray_of(load_tray_file(path))
    assert any("its z- face" in n for n in notes)
    assert any(p.kind == "mark" for p in tray.placed)


@pytest.mark.parametrize(
    ("parts", "key", "words"),
    [
        ("", "part", "missing"),
        ("[[part]]\n", "part[0]", "either from a design"),
        ('[[part]]\ndesign = "a.toml"\nstore = "b"\n', "part[0]", "either from a design"),
        ('[[part]]\ndesign = "none.toml"\n', "part[0].design", "no file"),
        ('[[part]]\nstore = "b"\nrun = "out"\n', "part[0].run", "design file"),
        ('[[part]]\nstore = "b"\nprotected = ["x"]\n', "part[0].protected", "Regions"),
        ('[[part]]\nstore = "b"\ncopies = 0\n', "part[0].copies", "at least 1"),
        ('[[part]]\nstore = "b"\norientation = ["x 90 deg"]\n', "part[0].orientation[0]", "x 90"),
        ('[[part]]\nstore = "b"\nposition = [1, 2]\n', "part[0].position", "position_mm"),
        ('[[part]]\nstore = "b"\nposition_mm = [1, nan]\n', "part[0].position_mm[1]", "finite"),
        ('[[part]]\nstore = "b"\nmark = "sticker"\n', "part[0].mark", "tag"),
    ],
)
def test_a_wrong_tray_file_names_file_and_key(tmp_path, parts, key, words):
    path = tray_file(tmp_path, parts)
    with pytest.raises(InputError, match=words) as error:
        load_tray_file(path)
    assert error.value.file == str(path)
    assert error.value.key == key


def test_what_goes_wrong_later_names_its_place_too(small_design, capsys):
    folder = small_design.parent
    path = tray_file(folder, '[[part]]\ndesign = "design.toml"\nrun = "gone"\n')
    with pytest.raises(InputError, match=r"part.npz"):
        tray_of(load_tray_file(path))
    path = tray_file(folder, '[[part]]\ndesign = "design.toml"\ncopies = 500\n')
    with pytest.raises(InputError, match="no room on the tray") as error:
        tray_of(load_tray_file(path))
    assert error.value.file == str(path)
    row = '[[part]]\ndesign = "design.toml"\nposition_mm = [{}, 20]\n'
    path = tray_file(folder, row.format(20) + row.format(22))
    assert main(["tray", str(path), "--out", str(folder / "out"), "--quiet"]) == 3
    assert "overlap on the tray" in capsys.readouterr().err
    assert not (folder / "out").exists()
    path.write_text("[[part")
    with pytest.raises(FileFormatError):
        load_tray_file(path)


def test_the_picture_says_what_stands_where(pads):
    tray, _ = tray_of(load_tray_file(pads))
    picture = tray_picture(tray)
    assert "pad 1, pad 2, kept" in picture.alt
    assert "front right" in picture.caption
    assert picture.png == tray_picture(tray).png


def test_orientations_from_the_shell(small_design, capsys):
    page = small_design.parent / "table.html"
    words = ["orientations", str(small_design), "--order", "height", "--html", str(page)]
    words += ["--out", str(small_design.parent / "none"), "--json", "--quiet"]
    assert main(words) == 0
    answer = json.loads(capsys.readouterr().out)
    heights = [c["size_mm"][2] for c in answer["choices"]]
    assert len(heights) == 6
    assert heights == sorted(heights)
    assert page.read_text().count("<tr>") == 7
    assert main([*words[:2], "--order", "beauty", "--quiet"]) == 3
    assert "ranked by" in capsys.readouterr().err


def test_a_design_that_is_optimised_is_printed_from_its_run_only(small_design):
    folder = small_design.parent
    table = """
[optimise]
resins = ["measured-soft", "measured-hard"]
objective = "compliance"
design_in = ["pad"]
void = false
filter_radius_mm = 2.0
"""
    save_part(build(small_design).part, folder / "part.npz")
    small_design.write_text(small_design.read_text() + table)
    path = tray_file(folder, '[[part]]\ndesign = "design.toml"\n')
    with pytest.raises(InputError, match="run it first") as error:
        tray_of(load_tray_file(path))
    assert error.value.key == "optimise"
    path = tray_file(folder, '[[part]]\ndesign = "design.toml"\nrun = "."\n')
    _, notes = tray_of(load_tray_file(path))
    assert any(n.startswith("Caution") and "was changed after its run" in n for n in notes)

"""The whole job on a small pad: shell and Python, bad input, interruption, two runs at once."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest

from voxelmat import cli
from voxelmat.errors import Cancelled, InputError
from voxelmat.io.mesh import write_stl
from voxelmat.monitor import CancelFlag
from voxelmat.printing.readback import read_stack
from voxelmat.shape.solid import box
from voxelmat.workflow.pipeline import run


def changed(design: Path, *swaps: tuple[str, str]) -> Path:
    text = design.read_text()
    for old, new in swaps:
        assert old in text
        text = text.replace(old, new)
    design.write_text(text)
    return design


def shell(capsys, *words) -> tuple[int, dict]:
    code = cli.main([*map(str, words), "--json", "--quiet"])
    return code, json.loads(capsys.readouterr().out)


def test_everything_from_the_shell(design, tmp_path, capsys):
    out = tmp_path / "out"
    code, data = shell(capsys, "run", design, "--out", out)
    assert code == data["exit_code"] == 0
    assert [v["status"] for v in data["verdicts"]] == ["met"]
    assert not [f for f in data["findings"] if f["severity"] == "stop"]
    case = data["load_cases"]["press"]
    # Both solves take the same grid, so what is left is the halftone of the blended pad and its
    # edges, which a distance field of 1 mm voxels rounds by a third of a voxel.
    assert case["as_printed_energy_mJ"] == pytest.approx(case["energy_mJ"], rel=0.04)
    assert case["as_printed_energy_mJ"] != case["energy_mJ"]
    assert case["force_balance"] < 1e-6
    assert 0 < abs(case["estimated_displacement_error"]) < 0.5
    page = (out / "report.html").read_text("utf-8")
    assert "pad on a plate" in page
    assert "http://" not in page.replace("http://www.w3.org", "")
    stack = read_stack(out / "stack")
    volumes = {c.resin: c.volume_mm3 for c in stack.channels}
    assert volumes["measured-hard"] == pytest.approx(12 * 8 * (2 + 0.25 * 4), rel=0.02)
    assert json.loads((out / "result.json").read_text())["design"] == "pad on a plate"

    code, data = shell(capsys, "preflight", out / "stack", "--design", design, "--out", out)
    assert code == 0
    code, data = shell(capsys, "report", design, "--out", out)
    assert code == 0


def test_a_closed_form_pad(design, tmp_path):
    # A column of pad over plate with its sides held: p t (1 + nu) (1 - 2 nu) / (E (1 - nu)) a
    # layer, textbook formula for confined compression (J1: layers in series).
    changed(
        design,
        ("blend = { measured-soft = 0.75, measured-hard = 0.25 }", 'resin = "measured-soft"'),
        (
            "[[load_case.load]]",
            '[[load_case.support]]\nregion = "all"\nslide = ["z"]\n\n[[load_case.load]]',
        ),
        (
            "[[load_case]]",
            '[[region]]\nname = "all"\nkind = "box"\nlow_mm = [-9, -9, -9]\n'
            "high_mm = [99, 99, 99]\n\n[[load_case]]",
        ),
    )
    result = run(design, tmp_path / "out", stages=("solve",)).data.results["press"]
    layers = ((4.0, 1.0, 0.45), (2.0, 2000.0, 0.35))
    wanted = sum(0.02 * t * (1 + n) * (1 - 2 * n) / (E * (1 - n)) for t, E, n in layers)
    assert result.displacement[..., 2].min() == pytest.approx(-wanted, rel=1e-6)


def test_fields_as_vti(design, tmp_path, capsys):
    code, data = shell(capsys, "solve", design, "--out", tmp_path / "out", "--vti")
    assert code == 0
    assert [Path(p).name for p in data["vti"]] == ["1-press.vti"]
    assert b"vtkZLibDataCompressor" in Path(data["vti"][0]).read_bytes()[:400]


def test_not_met_and_cannot_be_said(design, tmp_path, capsys):
    changed(design, ("at_least_mm = 0.0001", "at_least_mm = 5.0"))
    code, data = shell(capsys, "solve", design, "--out", tmp_path / "a")
    assert code == 1
    assert data["verdicts"][0]["margin"] < 0
    changed(design, ("temperature_degC = 23.0\ncycles", "temperature_degC = 80.0\ncycles"))
    code, data = shell(capsys, "solve", design, "--out", tmp_path / "b")
    assert code == 2
    assert "80" in " ".join(data["verdicts"][0]["reasons"])


@pytest.mark.parametrize(
    ("swap", "words"),
    [
        (("[grid]", "[gird]"), "grid"),
        (('unit = "mm"', ""), "unit"),
        (('mesh = "pad.stl"', 'mesh = "none.stl"'), "none.stl"),
        (('side = "z+"', 'side = "up"'), "side"),
        (("pressure_MPa = 0.02", "pressure_MPa = nan"), "pressure_MPa"),
        (("fixed = true", 'slide = ["x", "y"]'), "not held"),
        (('profile = "invented-coarse"', 'profile = "invented-corase"'), "invented-coarse"),
        (("format = 1", "format = 99"), "99"),
        (('region = "top"\npressure', 'region = "tpo"\npressure'), "top"),
        (('mesh = "pad.stl"\nunit = "mm"', 'mesh = "pad.stl"\nunit = "m"'), "Check the unit"),
        (('mesh = "pad.stl"', 'mesh = "cut.stl"'), "cut.stl"),
        (('mesh = "pad.stl"', 'mesh = "open.stl"'), "open"),
        (('mesh = "plate.stl"', 'mesh = "pad.stl"'), "overlap"),
        (("spacing_mm = [1.0, 1.0, 1.0]", "spacing_mm = [1.0, 0.0, 1.0]"), "spacing_mm"),
        (
            (
                'name = "top"\nkind = "face"\nside = "z+"',
                'name = "top"\nkind = "sphere"\ncentre_mm = [99, 0, 0]\nradius_mm = 3.0',
            ),
            "holds nothing",
        ),
        (("[print]", '[print]\norientation = ["x 45"]'), "45"),
    ],
)
def test_bad_input_is_named_and_nothing_is_left(design, tmp_path, capsys, swap, words):
    changed(design, swap)
    out = tmp_path / "out"
    code, data = shell(capsys, "run", design, "--out", out)
    assert code == 3, data
    assert words in data["error"]
    assert "Traceback" not in data["error"]
    assert not (out / "stack").exists()
    assert not (out / "report.html").exists()


def test_bad_materials(design, capsys, tmp_path):
    soft = design.parent / "measured-soft.toml"
    good = soft.read_text()
    for old, new, words in (
        ("value = 1.0\nlow = 1.0\nhigh = 1.0", "value = -1.0\nlow = -1.0\nhigh = -1.0", "E_MPa"),
        ("value = 0.45\nlow = 0.45\nhigh = 0.45", "value = 0.5\nlow = 0.5\nhigh = 0.5", "nu"),
    ):
        assert old in good
        soft.write_text(good.replace(old, new))
        code, data = shell(capsys, "solve", design, "--out", tmp_path / "out")
        assert code == 3
        assert words in data["error"]
        assert "measured-soft.toml" in data["error"]


def test_a_part_too_large_for_the_tray(design, tmp_path, capsys):
    write_stl(box((140.0, 90.0, 4.0), (0.0, 0.0, 2.0), name="pad"), tmp_path / "pad.stl")
    code, data = shell(capsys, "stack", design, "--out", tmp_path / "out")
    assert code == 3
    assert "tray" in data["error"]
    assert "invented-coarse" in data["error"]
    assert not (tmp_path / "out" / "stack").exists()


def test_hardness_as_a_band(capsys):
    code, data = shell(capsys, "materials", "--shore-a", "60")
    assert code == 0
    row = data["hardness"][0]
    # H1, Gent 1958 (from memory): Shore A 60 stands for 3.6051 MPa.
    assert row["E_Gent_1958_MPa"] == pytest.approx(3.6051, abs=1e-4)
    # log10 E = 0.0235 S - 0.6403 (from memory).
    assert row["E_log_relation_MPa"] == pytest.approx(10 ** (0.0235 * 60 - 0.6403), rel=1e-9)
    assert row["E_low_MPa"] < row["E_Gent_1958_MPa"] < row["E_high_MPa"]
    assert cli.main(["materials", "--shore-a", "120"]) == 3


def test_words_that_are_no_command(capsys):
    assert cli.main(["runn"]) == 3
    assert "runn" in capsys.readouterr().err
    assert cli.main(["run"]) == 3


def test_a_cancelled_run_goes_on(design, tmp_path):
    out = tmp_path / "out"
    flag = CancelFlag()

    class StopInTheStack:
        def report(self, stage, *, done, total, **figures):
            if stage == "writing layers" and done:
                flag.cancel()
            flag.report(stage, done=done, total=total, **figures)

    with pytest.raises(Cancelled):
        run(design, out, monitor=StopInTheStack())
    assert not (out / "stack").exists()
    again = run(design, out)
    fresh = run(design, tmp_path / "other")
    for one, two in zip(again.stack.channels, fresh.stack.channels, strict=True):
        assert one.sha256 == two.sha256
    assert again.part == fresh.part
    np.testing.assert_array_equal(
        again.data.results["press"].displacement, fresh.data.results["press"].displacement
    )


def test_ctrl_c_in_the_shell(design, tmp_path):
    out = tmp_path / "out"
    environment = {**os.environ, "PYTHONUNBUFFERED": "1"}
    words = [sys.executable, "-m", "voxelmat", "run", str(design), "--out", str(out)]
    process = subprocess.Popen(words, stderr=subprocess.PIPE, env=environment, text=True)
    for line in process.stderr:
        if line.startswith("finding regions"):
            process.send_signal(signal.SIGINT)
            break
    _, rest = process.communicate(timeout=120)
    assert process.returncode == 4, rest
    assert "call the same command again" in rest
    assert "Traceback" not in rest
    assert not (out / "report.html").exists()


def test_two_runs_into_one_folder(design, tmp_path, capsys):
    out = tmp_path / "out"
    told = []

    class SecondRun:
        def report(self, stage, *, done, total, **figures):
            if not told:
                told.append(subprocess.run(
                    [sys.executable, "-m", "voxelmat", "run", str(design), "--out", str(out),
                     "--quiet"],
                    capture_output=True, text=True, check=False, timeout=120,
                ))  # fmt: skip

    assert run(design, out, monitor=SecondRun()).exit_code == 0
    assert told[0].returncode == 4
    assert "Another run" in told[0].stderr


def test_out_is_a_file(design, tmp_path, capsys):
    (tmp_path / "out").write_text("mine")
    code, data = shell(capsys, "run", design, "--out", tmp_path / "out")
    assert code == 4
    assert "out" in data["error"]
    assert (tmp_path / "out").read_text() == "mine"


def test_unknown_stage(design, tmp_path):
    with pytest.raises(InputError, match="stack"):
        run(design, tmp_path / "out", stages=("stacks",))


def test_importing_is_light():
    code = (
        "import sys, time; t = time.perf_counter(); import voxelmat; t = time.perf_counter() - t; "
        "bad = [m for m in ('numba', 'pyvista', 'ipywidgets', 'scipy', 'numpy') "
        "if m in sys.modules]; print(bad, t)"
    )
    told = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    bad, seconds = told.stdout.rsplit(maxsplit=1)
    assert bad == "[]"
    assert float(seconds) < 0.3


def test_public_names():
    import voxelmat

    start = time.perf_counter()
    for name in voxelmat.__all__:
        assert getattr(voxelmat, name) is not None
    assert time.perf_counter() - start < 60
    with pytest.raises(AttributeError, match="nothing"):
        _ = voxelmat.nothing


def test_the_example_of_the_readme(design, tmp_path, monkeypatch, capsys):
    text = (Path(__file__).parents[2] / "README.md").read_text()
    code = text.split("```python\n")[1].split("```")[0]
    assert "notebooks/grip/grip.toml" in code
    monkeypatch.chdir(tmp_path)
    (tmp_path / "out").mkdir()
    space: dict = {}
    exec(code.replace("notebooks/grip/grip.toml", str(design)), space)
    assert space["run"].exit_code == 0
    assert (tmp_path / "out" / "report.html").is_file()

"""Trade-off fronts, moving pictures, and the three values of everything asked, on small designs."""

import json

import numpy as np
import pytest
from PIL import Image

from voxelmat.cli import main
from voxelmat.errors import Cancelled, InputError
from voxelmat.io.design import load_design
from voxelmat.monitor import SILENT
from voxelmat.topopt.iterate import Iterate
from voxelmat.workflow import tradeoff as module
from voxelmat.workflow.animate import Frames, write_animation
from voxelmat.workflow.build import build
from voxelmat.workflow.report_tradeoff import front_csv, front_lines, front_picture
from voxelmat.workflow.tradeoff import Point, Sweep, limit_key, tradeoff

ASKED = """
[optimise]
resins = ["measured-soft", "measured-hard"]
objective = "compliance"
filter_radius_mm = 2.6
design_in = ["pad"]
iterations = 4
levels = 8

[[optimise.limit]]
kind = "resin"
resin = "measured-hard"
at_most_fraction = 0.4

[[optimise.limit]]
measure = "mass"
at_most_g = 0.6
"""
MANY = range(1, 102)


@pytest.fixture
def asked(design):
    text = design.read_text().replace("[1.0, 1.0, 1.0]", "[2.0, 2.0, 2.0]")
    design.write_text(text + ASKED)
    return design


def test_a_front_of_designs_that_open(asked, tmp_path):
    design = load_design(asked)
    key = limit_key(design, "measured-hard")
    assert key == "optimise.limit[0].at_most_fraction"
    seen = []
    front = tradeoff(design, [Sweep(key=key, values=(0.4, 0.2, 0.0 + 0.3))], tmp_path / "front",
                     seen=seen.append)  # fmt: skip
    assert [p.limits for p in front.points] == [(0.2,), (0.3,), (0.4,)]
    assert seen == sorted(seen, key=lambda p: p.number)
    work = [p.values[0].optimised for p in front.points]
    assert work[0] > work[1] > work[2]
    for p in front.points:
        opened = load_design(tmp_path / "front" / p.design)
        assert opened.optimise.skip
        assert opened.optimise.limits[0].at_most == p.limits[0]
        part = build(opened).part
        hard = part.volumes()["measured-hard"] - 12 * 8 * 2  # the plate is hard and not designed
        assert hard <= 12 * 8 * 4 * p.limits[0] * 1.01
    assert json.loads((tmp_path / "front" / "front.json").read_text())["invented"]
    lines = front_lines(front, ("hard",))
    assert len(lines) == 4
    assert "point-03.toml" in lines[3]
    assert front_csv(front).count("\n") == 4
    picture = front_picture(front, ("hard",))
    assert picture.png[:4] == b"\x89PNG"
    assert "3 designs" in picture.alt


def test_a_value_that_no_design_meets_is_a_point_without_one(asked, tmp_path):
    design = load_design(asked)
    front = tradeoff(design, [Sweep(key=limit_key(design, "mass"), values=(0.01, 0.6))],
                     tmp_path / "front")  # fmt: skip
    bad, good = front.points
    assert not bad.values
    assert "mass" in bad.reason
    assert good.feasible
    assert "-" in front_lines(front, ("mass",))[1]


def test_two_limits_go_back_and_forth_and_a_stop_keeps_points(asked, tmp_path):
    design = load_design(asked)
    keys = [limit_key(design, n) for n in ("measured-hard", "1")]
    order = module._serpentine([2, 3])
    assert [at for _, at in order] == [(0, 0), (0, 1), (0, 2), (1, 2), (1, 1), (1, 0)]

    class Stop:
        def report(self, stage, *, done, total, **figures):
            if done == 1 and figures.get("doing", "").startswith("optimising"):
                raise Cancelled("enough")

    sweeps = [Sweep(key=keys[0], values=(0.3, 0.4)), Sweep(key=keys[1], values=(0.5, 0.6))]
    with pytest.raises(Cancelled, match="point 2"):
        tradeoff(design, sweeps, tmp_path / "front", monitor=Stop())
    assert (tmp_path / "front" / "point-01.toml").is_file()
    assert not (tmp_path / "front" / "point-02.npz").exists()


def test_a_point_beaten_by_a_tighter_one_is_marked(asked):
    sweep = Sweep(key="optimise.limit[0].at_most_fraction", values=(0.2, 0.4))

    def point(number, limit, work):
        from voxelmat.model.design_stages import StagedValue

        value = StagedValue(name="c", unit="", sense="least", limit=None, optimised=work,
                            palette=work)  # fmt: skip
        return Point(number=number, limits=(limit,), values=(value,), feasible=True)

    tight, loose = module._compared([point(1, 0.2, 1.0), point(2, 0.4, 2.0)], [sweep])
    assert (tight.beaten_by, loose.beaten_by) == (0, 1)


@pytest.mark.parametrize(
    ("sweeps", "message"),
    [
        ([], "one or two limits"),
        ([Sweep(key="optimise.limit[0].resin", values=(1.0,))], "not the value of a limit"),
        ([Sweep(key="optimise.limit[0].at_most_fraction", values=(0.2, 0.2))], "twice"),
        ([Sweep(key="optimise.limit[0].at_most_fraction", values=tuple(0.001 * n for n in MANY))],
         "at most 100"),
    ],
)  # fmt: skip
def test_bad_sweeps(asked, tmp_path, sweeps, message):
    with pytest.raises(InputError, match=message):
        tradeoff(asked, sweeps, tmp_path / "front", monitor=SILENT)
    with pytest.raises(InputError, match="0 limits"):
        limit_key(load_design(asked), "volume")


def test_moving_pictures(asked, tmp_path, capsys):
    film = tmp_path / "forms.gif"
    out = tmp_path / "out"
    assert main(["optimise", str(asked), "--out", str(out), "--quiet", "--animate", str(film)]) == 0
    with Image.open(film) as made:
        assert made.n_frames == 4
    said = capsys.readouterr().out
    assert "as optimised" in said
    assert "as a part" in said
    result = json.loads((out / "result.json").read_text())["optimised"]
    assert {v["name"] for v in result["values"]} == {
        "compliance", "volume of measured-hard", "mass",
    }  # fmt: skip
    bad = ["optimise", str(asked), "--out", str(out), "--quiet", "--animate", "forms.mp4"]
    assert main(bad) == 3
    assert "gif" in capsys.readouterr().err


def test_many_iterates_are_thinned_and_none_is_an_error(asked, tmp_path):
    frames = Frames()
    part = build(asked).part

    class Record:
        objective, grey, sharpness = 1.0, 0.0, 0.0

    for n in range(1, 500):
        record = Record()
        record.iteration = n
        frames(Iterate(record, np.zeros(2), lambda x, s: part))
    steps = np.diff([i.record.iteration for i in frames.iterates])
    assert 60 <= len(frames.iterates) <= 120
    assert set(steps) == {8}
    film = write_animation(frames.iterates[:3], tmp_path / "a.webp", final=part)
    with Image.open(film) as made:
        assert made.n_frames >= 2
    with pytest.raises(InputError, match="no iterate"):
        write_animation([], tmp_path / "b.gif")


def test_printed_values_stand_beside_the_others(asked, tmp_path, capsys):
    out = tmp_path / "out"
    code = main(["run", str(asked), "--out", str(out), "--quiet", "--json"])
    assert code in (0, 1)
    result = json.loads(capsys.readouterr().out)["optimised"]
    for value in result["values"]:
        assert value["as_printed"] == pytest.approx(value["as_a_part"], rel=0.3)
        assert value["as_printed"] != value["as_a_part"]
    page = (out / "report.html").read_text(encoding="utf-8")
    assert "as printed" in page
    assert "What each limit costs" in page or not result["prices"]


def test_tradeoff_on_the_command_line(asked, tmp_path, capsys):
    out = tmp_path / "front"
    words = ["tradeoff", str(asked), "--out", str(out), "--quiet", "--limit"]
    assert main([*words, "measured-hard=0.3,0.4"]) == 0
    assert (out / "front.png").is_file()
    assert (out / "front.csv").is_file()
    assert "point-02.toml" in capsys.readouterr().out
    assert main([*words, "measured-hard"]) == 3
    assert "mass=10,12,15" in capsys.readouterr().err

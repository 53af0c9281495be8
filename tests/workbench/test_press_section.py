"""Pressing on the bench: what it reads is what contact gives; bad places are said."""

import pytest

from voxelmat.errors import InputError
from voxelmat.fea.contact import press
from voxelmat.model.indenter import SphereIndenter
from voxelmat.workbench.bench import Workbench


@pytest.fixture
def bench(small_design):
    bench = Workbench(small_design)
    bench.answers.set_live(False)
    yield bench
    bench.close()


def test_it_reads_what_contact_gives(bench):
    bench.press.shape("ball", 4.0)
    bench.press.place([6.0, 4.0, 6.0], "z-")
    curve = bench.press.press(0.2).wait(120)
    built = bench.build()
    ball = SphereIndenter(position=(6.0, 4.0, 60.0), push="z-", radius=4.0)
    alone = press(built.part, built.load_cases[0].supports, ball, [0.05, 0.1, 0.15, 0.2])
    assert curve.force == pytest.approx(alone.force, rel=1e-6)
    rows = dict(next(c for c in bench.press.controls() if c["kind"] == "table")["rows"])
    assert rows["force"].endswith(" N")
    assert float(rows["stiffness there"].split()[0]) == pytest.approx(curve.tangent[-1], rel=5e-3)
    assert not next(c for c in bench.press.controls() if c["kind"] == "table")["stale"]
    bench.set("seed", 9)
    assert next(c for c in bench.press.controls() if c["kind"] == "table")["stale"]


def test_a_clicked_place_and_a_plate_by_the_controls(bench):
    section = bench.sections["press"]
    bench.pick((6.0, 4.0, 6.0))
    section.act("kind", "rectangular plate")
    section.act("size:0", 4)
    section.act("here", None)
    section.act("depth", 0.1)
    bench.jobs.settle(120)
    assert bench.press.curve.force[-1] > 0
    assert bench.script[-1] == "bench.press.press(depth_mm=0.1)"


def test_what_cannot_be_is_said(bench):
    with pytest.raises(InputError, match="Click the part"):
        bench.press.press(0.1)
    with pytest.raises(InputError, match="one of ball"):
        bench.press.shape("needle")
    with pytest.raises(InputError, match="above 0"):
        bench.press.shape("ball", -1.0)
    with pytest.raises(InputError, match="push"):
        bench.press.place([0, 0, 0], "down")
    bench.press.place([900.0, 0.0, 0.0], "z-")
    with pytest.raises(InputError, match="passes by every node"):
        bench.press.press(0.1).wait(120)

"""From a dropped mesh to a solved design by verbs alone; what is refused is said."""

import math

import numpy as np
import pytest
import trimesh

from voxelmat.errors import InputError
from voxelmat.io.design import load_design
from voxelmat.io.mesh import write_stl
from voxelmat.shape.solid import box
from voxelmat.workbench.bench import Workbench


def _stl(shape):
    return trimesh.exchange.stl.export_stl(shape)


@pytest.fixture
def fresh(tmp_path):
    bench = Workbench(tmp_path / "fresh.toml")
    bench.answers.set_live(False)
    yield bench
    bench.close()


@pytest.fixture
def bench(small_design):
    bench = Workbench(small_design)
    bench.answers.set_live(False)
    yield bench
    bench.close()


def test_from_a_dropped_mesh_to_an_answer_by_the_controls_alone(fresh):
    shape, loads, needs = (fresh.sections[n] for n in ("shape", "loads", "needs"))
    shape.act("file", ("a block.stl", _stl(trimesh.creation.box((1.0, 0.5, 0.4)))))
    sizes = shape.sizes("a-block.stl")
    assert sizes["cm"] == pytest.approx((10.0, 5.0, 4.0))
    shape.act("unit", "cm")
    shape.act("name", "block")
    shape.act("add", None)
    assert fresh.script[-1] == "bench.shape.add_body(file='a-block.stl', unit='cm', name='block')"
    assert np.prod(fresh.build().part.grid.shape) < 500_000
    fresh.whole.set_spacing([1.0, 1.0, 1.0])
    for name, at in (("foot", (0.0, 0.0, -2.0)), ("head", (0.1, 0.2, 2.0))):
        fresh.pick(at)
        shape.act("region name", name)
        shape.act("grow", None)
    loads.act("case name", "press")
    loads.act("add case", None)
    loads.act("region", "foot")
    loads.act("add hold", None)
    loads.act("region", "head")
    loads.act("load", "force")
    loads.act("vector", [0, 0, -20.0])
    loads.act("add load", None)
    needs.act("need name", "gives little")
    needs.act("at_most", 0.5)
    needs.act("add need", None)
    found = fresh.answers.solve(error_by_voxels=False).wait(120)
    assert found.results["press"].applied == pytest.approx((0, 0, -20.0))
    assert len(found.verdicts) == 1
    script = list(fresh.script)
    saved = fresh.save()
    again = load_design(saved)
    assert [r.name for r in again.regions] == ["foot", "head"]
    assert all(math.isclose(r.settings["area_mm2"], 50.0) for r in again.regions)
    # The script that the screen wrote makes the same design from nothing.
    other = Workbench(saved.with_name("other.toml"))
    other.answers.set_live(False)
    for line in script:
        if ".solve(" not in line:
            exec(line, {"bench": other})
    other.whole.set_spacing([1.0, 1.0, 1.0])
    ours, theirs = fresh.draft.data, other.draft.data
    assert {k: v for k, v in ours.items() if k != "name"} == {
        k: v for k, v in theirs.items() if k != "name"
    }
    other.close()


def test_a_revised_mesh_stops_until_its_region_is_confirmed(bench):
    bench.shape.grow("crown", [6.0, 4.0, 6.0], 20.0, "pad")
    folder = bench.draft.path.parent
    write_stl(box((12.0, 9.0, 4.0), (0.0, 0.0, 2.0), name="pad"), folder / "pad-2.stl")
    bench.shape.revise("pad", "pad-2.stl")
    with pytest.raises(InputError, match="108 mm2"):
        bench.build()
    assert bench.shape.confirm_region("crown") == pytest.approx(108.0)
    bench.build()
    with pytest.raises(InputError, match="nothing to confirm"):
        bench.shape.confirm_region("top")


def test_the_face_on_the_tray(bench):
    assert bench.shape.lie_on([6.0, 4.0, 6.0]) == ["x 180"]
    assert bench.design.printing.orientation == ("x 180",)
    assert bench.shape.lie_on([6.0, 4.0, 0.0]) == []
    assert bench.shape.lie_on([12.0, 4.0, 1.0]) == ["y 90"]
    wedge = trimesh.creation.box((10.0, 10.0, 10.0))
    wedge.apply_transform(trimesh.transformations.rotation_matrix(0.3, [0, 1, 0]))
    wedge.apply_translation([50.0, 0.0, 0.0])
    path = bench.shape.bring("wedge.stl", _stl(wedge))
    bench.shape.add_body(path.name, "mm", "wedge", "measured-hard")
    middle = trimesh.transformations.rotation_matrix(0.3, [0, 1, 0])[:3, 2] * 5.0 + [50, 0, 0]
    with pytest.raises(InputError, match=r"leans 17\.2 degrees"):
        bench.shape.lie_on(list(middle))


def test_what_cannot_be_is_said_and_changes_nothing(bench):
    before = bench.draft.data
    shape, loads, needs = (bench.sections[n] for n in ("shape", "loads", "needs"))
    for action, message in (
        (lambda: shape.act("file", ("notes.txt", b"x")), "choose such a file"),
        (lambda: shape.act("file", ("empty.stl", b"")), "empty"),
        (lambda: shape.act("file", ("bad.stl", b"not a mesh at all")), "bad.stl"),
        (lambda: shape.act("side region", None), "name first"),
        (lambda: bench.shape.remove_region("top"), "top"),
        (lambda: bench.shape.remove_body("lid"), "no body 'lid'"),
        (lambda: bench.shape.grow("x", [90.0, 0.0, 0.0]), "no surface"),
        (lambda: bench.loads.force("nowhere", [0, 0, 1.0]), "nowhere"),
        (lambda: loads.act("add load", None), "is 0 along"),
        (lambda: loads.act("set:duration_s", "long"), "'long'"),
        (lambda: loads.act("add case", None), "name first"),
        (lambda: needs.act("add need", None), "name first"),
        (lambda: bench.needs.require("x", "beauty", at_least=1.0), "beauty"),
    ):
        with pytest.raises(Exception, match=message):
            action()
    assert bench.draft.data == before


def test_a_dropped_file_never_replaces_another(bench):
    folder = bench.draft.path.parent
    old = (folder / "pad.stl").read_bytes()
    data = _stl(trimesh.creation.box((1, 1, 1)))
    assert bench.shape.bring("../../pad.stl", data).name == "pad-2.stl"
    assert bench.shape.bring("pad.stl", data).name == "pad-2.stl"
    assert (folder / "pad.stl").read_bytes() == old
    assert [p.name for p in folder.parent.glob("pad*.stl")] == []


def test_every_section_describes_itself_on_an_empty_and_a_full_design(fresh, bench):
    for screen in (fresh, bench):
        for section in screen.sections.values():
            shown = section.controls()
            assert shown
            assert all("kind" in control for control in shown)

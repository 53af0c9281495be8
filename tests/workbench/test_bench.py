"""The workbench without a screen: verbs, script, messages, one undo for screen and script."""

import pytest

from voxelmat.errors import InputError
from voxelmat.workbench.bench import Workbench
from voxelmat.workbench.section import code_of


@pytest.fixture
def bench(small_design):
    bench = Workbench(small_design)
    yield bench
    bench.close()


def test_screen_and_script_share_one_undo(bench):
    bench.set("load_case[0].load[0].pressure_MPa", 0.03)
    bench.sections["whole"].act("name", "renamed")
    assert bench.script == ["bench.whole.set_name(name='renamed')"]
    assert bench.undo() == "name"
    assert bench.undo() == "load case 'press', load 1, pressure MPa"
    assert bench.design.cases[0].loads[0].settings["pressure_MPa"] == 0.02


def test_a_line_of_the_script_does_it_again(bench, small_design):
    bench.sections["whole"].act("spacing", [2, 2.0, 2])
    (line,) = bench.script
    bench.undo()
    exec(line, {"bench": bench})
    assert bench.design.spacing_mm == (2.0, 2.0, 2.0)


def test_what_is_refused_is_said_and_not_noted(bench):
    bench.guarded(lambda: bench.sections["whole"].act("spacing", ["wide", 1.0, 1.0]))
    assert bench.message_is_bad
    assert "'wide'" in bench.message
    assert bench.script == []
    assert bench.draft.undo_label == ""


def test_an_unknown_section_or_key_is_named(bench):
    with pytest.raises(AttributeError, match="whole"):
        bench.nothing  # noqa: B018
    with pytest.raises(InputError, match="no 'colour'"):
        bench.remove("colour")


def test_the_part_is_built_once_for_a_design(bench):
    part = bench.part
    assert bench.part is part
    bench.set("seed", 4)
    assert bench.part is not part


def test_code_is_python():
    line = code_of("mix", {"blend": {"soft": 0.25}, "at": (1, 2.0), "name": "it's"})
    assert line == "mix(blend={'soft': 0.25}, at=(1, 2.0,), name=\"it's\")"


def test_why_there_is_no_part_stays_until_it_is_mended(bench):
    bench.answers.set_live(False)
    bench.shape.box_region("nowhere", [90, 90, 90], [91, 91, 91])
    with pytest.raises(InputError, match="'nowhere'"):
        bench.build()
    bench.guarded(lambda: None)  # another click clears the message, not the trouble
    assert "'nowhere'" in bench.trouble
    bench.undo()
    bench.build()
    assert bench.trouble == ""

"""Optimising on the bench: ask, run, stop and keep, compare, take any iterate, undo."""

import numpy as np
import pytest

from voxelmat.errors import InputError
from voxelmat.workbench.bench import Workbench
from voxelmat.workflow.build import build


@pytest.fixture
def bench(small_design):
    bench = Workbench(small_design)
    bench.answers.set_live(False)
    bench.optimiser.set_up()
    bench.optimiser.ask("design_in", ["pad"])
    bench.optimiser.ask("iterations", 6)
    yield bench
    bench.close()


def test_what_is_asked_goes_into_the_design(bench):
    bench.optimiser.limit("resin", 0.3, "measured-hard")
    bench.optimiser.limit("mass", 0.4)
    asked = bench.design.optimise
    assert {(x.kind, x.at_most) for x in asked.limits} == {("resin", 0.3), ("mass", 0.4)}
    bench.optimiser.limit("mass", 0)
    assert [x.kind for x in bench.design.optimise.limits] == ["resin"]
    section = bench.sections["optimiser"]
    with pytest.raises(InputError, match="'much'"):
        section.act("volume", "much")
    with pytest.raises(InputError, match="no target deflection"):
        section.act("objective", "target deflection")
    assert bench.undo() == "limit of mass"


def test_runs_are_kept_and_any_iterate_can_be_taken(bench):
    first = bench.optimiser.start().wait(200)
    bench.optimiser.limit("resin", 0.8, "measured-hard")
    second = bench.optimiser.start().wait(200)
    assert second.objective < first.objective  # more of the stiff resin may be used
    run = bench.optimiser.run(1)
    assert [i.record.iteration for i in run.iterates] == [1, 2, 3, 4, 5, 6]
    np.testing.assert_array_equal(run.at(-1).labels, first.part.labels)
    # The last iterate, made from what was kept in float32, is the result but for rounding.
    last = run.at(6)
    assert (last.occupancy == first.part.occupancy).mean() > 0.99
    tables = [c for c in bench.optimiser.controls() if c["kind"] == "table"]
    assert [row[0] for row in tables[-1]["rows"]] == ["1", "2"]
    section = bench.sections["optimiser"]
    section.act("other", "1")
    section.act("compare", None)
    assert bench.script[-1] == "bench.optimiser.compare(first=2, second=1)"
    parts = bench.optimiser.compare(1, 2)
    assert [p.digest for p in parts] == [first.part.digest, second.part.digest]
    with pytest.raises(InputError, match="runs 1 to 2"):
        bench.optimiser.compare(1, 3)
    before = bench.draft.data
    path = bench.optimiser.take(1, 3)
    assert bench.design.optimise.skip
    laid = build(bench.design).part
    third = run.at(3)
    pad = laid.bodies["pad"]
    ours = laid.palette_fractions()[laid.labels[pad]]
    names = [m.name for m in laid.resins]
    theirs = third.palette_fractions()[third.labels[pad]]
    order = [[m.name for m in third.resins].index(n) for n in names]
    np.testing.assert_allclose(ours, theirs[:, order], atol=1e-6)
    bench.undo()
    assert bench.draft.data == before
    assert path.exists()  # what was kept stays; the design no longer names it
    with pytest.raises(InputError, match="keeps no iteration 9"):
        bench.optimiser.take(1, 9)


def test_stop_keeps_the_last_whole_design(bench):
    bench.optimiser.ask("iterations", 400)
    job = bench.optimiser.start()
    while not bench.optimiser.run().iterates:
        assert not job.over, job.error
    bench.optimiser.stop()
    result = job.wait(100)
    assert result.cancelled
    assert result.iterations < 400
    assert bench.optimiser.run().result is result


def test_without_a_question_there_is_a_hint(small_design):
    bench = Workbench(small_design)
    with pytest.raises(InputError, match="Nothing is asked"):
        bench.optimiser.start()
    with pytest.raises(InputError, match="no run yet"):
        bench.optimiser.take()
    kinds = [c["kind"] for c in bench.optimiser.controls()]
    assert kinds == ["words", "button"]
    bench.close()

"""Answers: quick ones that follow edits, the full solve, staleness, lines and histograms."""

import numpy as np
import pytest

from voxelmat.errors import InputError
from voxelmat.workbench.bench import Workbench
from voxelmat.workflow.build import build
from voxelmat.workflow.live import coarse_design, live_answer
from voxelmat.workflow.shapecache import ShapeCache


@pytest.fixture
def bench(small_design):
    bench = Workbench(small_design)
    yield bench
    bench.close()


def test_a_quick_answer_follows_an_edit(bench):
    bench.answers.follow().wait(120)
    before = bench.answers.quick.verdicts[0].value
    assert not bench.answers.stale
    bench.set("load_case[0].load[0].pressure_MPa", 0.04)
    bench.answers.follow().wait(120)
    assert bench.answers.quick.verdicts[0].value == pytest.approx(2 * before, rel=1e-3)  # linear
    bench.answers.set_live(False)
    bench.set("load_case[0].load[0].pressure_MPa", 0.06)
    bench.jobs.settle(120)
    assert bench.answers.stale
    tables = [c for c in bench.answers.controls() if c["kind"] == "table"]
    assert tables
    assert all(t["stale"] for t in tables)


def test_the_full_solve_is_the_pipelines(bench, small_design):
    from voxelmat.fea.static import solve

    found = bench.answers.solve(error_by_voxels=False).wait(120)
    built = build(small_design)
    alone = solve(built.part, built.load_cases[0])
    np.testing.assert_allclose(found.results["press"].displacement, alone.displacement, atol=1e-9)
    assert found.coarsening == 1.0
    assert bench.answers.best is found


def test_no_load_case_and_no_support_are_said(bench):
    bench.set("requirement", [])
    saved = bench.draft.data["load_case"][0]
    bench.set("load_case", [{k: v for k, v in saved.items() if k != "support"}])
    bench.jobs.settle(120)
    with pytest.raises(InputError, match=r"support|held"):
        bench.answers.solve().wait(120)
    bench.answers.follow().wait(120)
    assert any("bad" in c.get("tone", "") for c in bench.answers.controls())
    bench.set("load_case", [])
    with pytest.raises(InputError, match="no load case"):
        bench.answers.solve()


def test_a_line_runs_through_the_voxels(bench):
    bench.answers.solve(error_by_voxels=False).wait(120)
    result = bench.answers.result()
    x, y = bench.answers.along([6.5, 4.5, -1.0], [6.5, 4.5, 7.0])
    assert np.isnan(y[x < 0.9]).all()
    inside = (x > 1.1) & (x < 6.9)
    cell = result.part.grid.index_of((6.5, 4.5, 3.5))
    corners = result.size[cell[0] : cell[0] + 2, cell[1] : cell[1] + 2, cell[2] : cell[2] + 2]
    assert y[np.abs(x - 4.5).argmin()] == pytest.approx(corners.mean(), rel=1e-6)
    assert np.isfinite(y[inside]).all()
    with pytest.raises(InputError, match="no material"):
        bench.answers.along([50, 0, 0], [60, 0, 0])
    with pytest.raises(InputError, match="same point"):
        bench.answers.along([1, 1, 1], [1, 1, 1])
    with pytest.raises(InputError, match="no field"):
        bench.answers.along([6, 4, -1], [6, 4, 7], field="colour")
    solid = bench.answers.histogram("von Mises stress")
    assert len(solid) == result.part.solid.sum()


def test_a_coarse_design_has_about_the_voxels_asked_for(small_design):
    built = build(small_design)
    coarse, factor = coarse_design(built.design, built.part.grid.n_voxels, 200)
    voxels = build(coarse).part.grid.n_voxels
    assert factor > 1
    assert 100 < voxels < 600
    same, one = coarse_design(built.design, built.part.grid.n_voxels, 10**6)
    assert (same, one) == (built.design, 1.0)
    found = live_answer(built.design, built.part.grid.n_voxels, most=200)
    assert found.coarsening == factor


def test_shapes_are_voxelised_once(small_design, monkeypatch):
    import voxelmat.workflow.build as module

    calls = []
    inner = module.assemble
    monkeypatch.setattr(module, "assemble", lambda *a, **k: calls.append(1) or inner(*a, **k))
    shapes = ShapeCache()
    first = build(small_design, shapes=shapes)
    text = small_design.read_text().replace("pressure_MPa = 0.02", "pressure_MPa = 0.03")
    small_design.write_text(text)
    second = build(small_design, shapes=shapes)
    assert len(calls) == 1
    assert second.load_cases != first.load_cases
    small_design.write_text(text.replace("[1.0, 1.0, 1.0]", "[2.0, 2.0, 2.0]"))
    build(small_design, shapes=shapes)
    assert len(calls) == 2


def test_what_an_edit_left_as_it_was_is_not_solved_again(small_design):
    text = small_design.read_text()
    first_case = text[text.index("[[load_case]]") : text.index("[[requirement]]")]
    second = first_case.replace('"press"', '"hold"').replace("0.02", "0.01")
    small_design.write_text(text.replace("[[requirement]]", second + "[[requirement]]"))

    def quick(before=None):
        design = build(small_design).design
        return live_answer(design, 576, before=before)

    first = quick()
    small_design.write_text(
        small_design.read_text().replace("pressure_MPa = 0.02", "pressure_MPa = 0.03")
    )
    edited = quick(first)
    assert edited.results["hold"] is first.results["hold"]
    assert edited.interfaces["hold"] is first.interfaces["hold"]
    assert edited.results["press"].iterations == 0  # the load only grew
    np.testing.assert_allclose(
        edited.results["press"].displacement, 1.5 * first.results["press"].displacement, rtol=1e-9
    )
    small_design.write_text(
        small_design.read_text().replace("measured-soft = 0.75", "measured-soft = 0.6")
    )
    stiffer, cold = quick(edited), quick()
    assert stiffer.results["hold"] is not first.results["hold"]
    for name, result in stiffer.results.items():
        assert result.size.max() == pytest.approx(cold.results[name].size.max(), rel=1e-3)
        assert result.size.max() < 0.9 * edited.results[name].size.max()

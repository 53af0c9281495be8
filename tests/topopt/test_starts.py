"""Where a run begins: ranked random starts, a start from a coarser grid, a continuation."""

import numpy as np
import pytest

from voxelmat.errors import Cancelled, InputError
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.design_spec import (
    Compliance,
    DesignSpec,
    MassLimit,
    Projection,
    TargetDeflection,
    VolumeLimit,
)
from voxelmat.model.goal import AtMost
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.loadcase import Force, LoadCase, Support
from voxelmat.model.material import Constant, Material
from voxelmat.model.measure_amount import Volume
from voxelmat.model.part import Part
from voxelmat.model.region import FaceRegion
from voxelmat.topopt.coarse import coarse_start, halved
from voxelmat.topopt.optimise import optimise
from voxelmat.topopt.problem import start_of
from voxelmat.topopt.setup import layout_problem
from voxelmat.topopt.starts import ranked_starts, scattered_start


def resin(name, E, density):
    """Invented."""
    return Material(
        name=name, kind="rigid", E=Constant(value=E, unit="MPa"), nu=Constant(value=0.35),
        density=Constant(value=density, unit="tonne/mm3"),
    )  # fmt: skip


def question(shape=(8, 4, 4), **kw):
    """A block held at one end and pulled down at the other; two resins and void."""
    part = Part(
        grid=VoxelGrid(shape=shape, spacing=(1.0, 1.0, 1.0)),
        resins=(resin("light", 500.0, 0.4e-9), resin("stiff", 2000.0, 1e-9)),
        palette=(EMPTY, Blend.pure("light")),
        labels=np.ones(shape, np.uint16),
    )
    case = LoadCase(
        name="tip",
        supports=(Support(region=FaceRegion(name="wall", side="x-")),),
        loads=(Force(region=FaceRegion(name="end", side="x+"), vector=(0, 0, -1)),),
    )
    base = {
        "resins": ("light", "stiff"), "objective": Compliance(), "filter_radius": 1.6,
        "limits": (MassLimit(mass=0.4e-9 * float(np.prod(shape))),), "iterations": 8,
        "projection": Projection(sharpness=(0.0,)),
    }  # fmt: skip
    return part, [case], DesignSpec(**{**base, **kw})


def test_starts_are_ranked_and_repeat_with_the_seed():
    part, cases, spec = question()
    results = ranked_starts(part, cases, spec, 3)
    assert len(results) == 3
    values = [r.objective for r in results]
    assert values == sorted(values)
    assert len(set(values)) == 3
    uniform = optimise(part, cases, spec).objective
    assert values[0] <= uniform
    assert uniform in values
    again = ranked_starts(part, cases, spec, 3)
    assert [r.objective for r in again] == values


def test_a_scattered_start_keeps_the_amount_and_differs_by_seed():
    part, cases, spec = question()
    problem, _ = layout_problem(part, cases, spec)
    u = problem.unknowns
    plain = u.forward(start_of(spec, u, problem.bounds))
    one, two = (scattered_start(question(seed=s)[2], problem, part.grid.spacing, 1) for s in (0, 1))
    assert not np.array_equal(one, two)
    fields = u.forward(one)
    assert fields.rho.mean() == pytest.approx(plain.rho.mean(), rel=0.02)
    np.testing.assert_allclose(fields.w.sum(0), 1.0, atol=1e-12)
    assert one.min() >= 0.0
    assert one.max() <= 1.0


def test_cancelling_ends_the_starts_with_what_there_is():
    class Stop:
        def report(self, stage, *, done, total, start, **figures):
            if start == 2 and done == 3:
                raise Cancelled("enough")

    part, cases, spec = question()
    results = ranked_starts(part, cases, spec, 5, monitor=Stop())
    assert len(results) == 2
    assert sum(r.cancelled for r in results) == 1
    with pytest.raises(InputError, match="number of starts"):
        ranked_starts(part, cases, spec, 0)


def test_a_coarser_start_is_nearer_than_a_uniform_one():
    part, cases, spec = question((12, 6, 6), iterations=2)
    start = coarse_start(part, cases, spec, iterations=15)
    assert start.min() >= 0.0
    assert start.max() <= 1.0
    plain, better = optimise(part, cases, spec), optimise(part, cases, spec, start=start)
    assert better.history[1].objective < plain.history[1].objective


def test_halving_keeps_masks_targets_and_how_full_voxels_are():
    nodes = np.zeros((9, 5, 5), bool)
    nodes[:, :, -1] = True
    solid, empty = np.zeros((8, 4, 4), bool), np.zeros((8, 4, 4), bool)
    solid[3, 1, 1] = True
    empty[4:6, 0:2, 0:2] = True
    empty[7, 3, 3] = True
    part, _, spec = question(
        objective=TargetDeflection(nodes=nodes, target=np.where(nodes, -0.1, 0.0)),
        solid=solid, empty=empty,
    )  # fmt: skip
    small, asked = halved(part, spec)
    assert small.grid.shape == (4, 2, 2)
    assert small.grid.upper == part.grid.upper
    assert asked.objective.nodes.shape == small.grid.node_shape
    assert asked.objective.nodes[:, :, -1].all()
    assert np.argwhere(asked.solid).tolist() == [[1, 0, 0]]
    assert np.argwhere(asked.empty).tolist() == [[2, 0, 0]]
    assert small.solid.all()


def test_halving_refuses_what_it_cannot_put_on_a_coarser_grid():
    part, _, spec = question((7, 4, 4))
    with pytest.raises(InputError, match="even number"):
        halved(part, spec)
    part, _, spec = question(limits=(AtMost(measure=Volume(), value=30.0),))
    with pytest.raises(InputError, match="leave it out"):
        halved(part, spec)


def test_penalty_and_projection_rise_together_and_the_start_matters():
    stages = Projection(sharpness=(0.0, 4.0), penalties=(1.0, 2.0, 3.0), every=3)
    part, cases, spec = question(
        resins=("stiff",), limits=(VolumeLimit(fraction=0.5),), projection=stages, iterations=12
    )
    problem, _ = layout_problem(part, cases, spec)
    seen = []
    for n in range(12):
        changed = problem.begin(n, ())
        seen.append((problem.unknowns.void.penalty, problem.sharpness(n), changed))
        assert problem.settled(n) == (n >= 6)
    assert (
        seen
        == [(1.0, 0.0, False)] * 3
        + [(2.0, 4.0, True)]
        + [(2.0, 4.0, False)] * 2
        + [(3.0, 4.0, True)]
        + [(3.0, 4.0, False)] * 5
    )
    result = optimise(part, cases, spec)
    assert result.history[0].objective < result.history[6].objective  # p 3 punishes grey
    assert [r.sharpness for r in result.history[:7]] == [0.0] * 3 + [4.0] * 4
    with pytest.raises(InputError, match="penalties"):
        Projection(penalties=(3.0, 2.0))

"""Several ways to come out: worst, mean plus deviations, gradients over them, refused rules."""

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.design_rules import LoadScatter, MaterialScatter, Robust
from voxelmat.model.design_spec import Compliance, DesignSpec, MassLimit, Projection, VolumeLimit
from voxelmat.model.goal import AtMost, Minimise
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.loadcase import Force, LoadCase, Support
from voxelmat.model.material import Constant, Material
from voxelmat.model.measure import Displacement
from voxelmat.model.measure_amount import Mass
from voxelmat.model.part import Part
from voxelmat.model.region import Box, FaceRegion
from voxelmat.topopt.ensemble import Ensemble, Scenario, SharedSystems, loads_of
from voxelmat.topopt.fields import NOMINAL, Realisation
from voxelmat.topopt.judge import added_by_scatter, worst
from voxelmat.topopt.limits import Bound, Goal
from voxelmat.topopt.physics import Case, Physics
from voxelmat.topopt.response_motion import MeanMotionResponse
from voxelmat.topopt.responses import Amount, ComplianceResponse
from voxelmat.topopt.robust import RobustProblem
from voxelmat.topopt.scatter import moved, scattered_resins, turned
from voxelmat.topopt.setup import layout_problem

SHAPE = (2, 3, 4)


def test_the_smooth_worst_lies_above_the_greatest_value_and_has_exact_slopes():
    y = np.array([1.0, 1.004, 0.7])
    value, slopes = worst(y, 0.01)
    assert y.max() <= value <= y.max() + 0.01 * np.log(3)
    for n in range(3):
        step = 1e-6 * np.eye(3)[n]
        difference = (worst(y + step, 0.01)[0] - worst(y - step, 0.01)[0]) / 2e-6
        assert slopes[n] == pytest.approx(difference, rel=1e-6, abs=1e-9)


def test_scatter_gives_the_mean_and_deviation_of_a_quadratic():
    # f = a x + b y + c x^2 with x, y normal of variance 1: mean c; to the order used, the
    # variance is a^2 + b^2 (worked by hand).
    a, b, c = 3.0, 4.0, 0.5
    up, down = np.array([a + c, b]), np.array([-a + c, -b])
    added, by_nominal, by_up, by_down = added_by_scatter(0.0, up, down, 2.0, 1e-9)
    assert added == pytest.approx(c + 2.0 * 5.0, rel=1e-8)
    assert by_nominal + by_up.sum() + by_down.sum() == pytest.approx(0.0, abs=1e-12)
    for n in range(2):
        e = 1e-6 * np.eye(2)[n]
        difference = (added_by_scatter(0.0, up + e, down, 2.0, 1e-9)[0]
                      - added_by_scatter(0.0, up - e, down, 2.0, 1e-9)[0]) / 2e-6  # fmt: skip
        assert by_up[n] == pytest.approx(difference, rel=1e-6)


def ensemble_problem(u, cases, dense, kind):
    """A robust problem on arrays with a dense solver, so that gradients are exact."""
    systems = SharedSystems(dense)

    def way(realisation, of=cases):
        return Scenario(
            realisation=realisation, physics=Physics(of, (1, 1, 1), element="full", system=systems)
        )

    def loads(angle):
        return tuple(turned(c, np.array([1.0, 0.3, 0.0]), angle) for c in cases)

    e = {}
    if "borders" in kind:
        e["eroded"] = way(Realisation(threshold=0.2))
        e["dilated"] = way(Realisation(threshold=-0.2))
    if "phases" in kind:
        e["phases"] = tuple(way(Realisation(bias=(s * 0.8, 0.0))) for s in (-1, 1))
    if "materials" in kind:
        e["materials"] = tuple(
            (way(Realisation(stiffness=tuple(1.0 + 0.2 * row))),
             way(Realisation(stiffness=tuple(1.0 / (1.0 + 0.2 * row)))))
            for row in np.eye(2)
        )  # fmt: skip
        e["of_materials"] = 2.0
    if "loads" in kind:
        e["loads"] = ((way(NOMINAL, loads(20.0)), way(NOMINAL, loads(-20.0))),)
        e["of_loads"] = 1.5 if "mean" in kind else None
    nodes = np.zeros(tuple(n + 1 for n in SHAPE), bool)
    nodes[:, :, -1] = True
    motion = MeanMotionResponse(case=0, nodes=nodes, direction=(0.0, 0.0, -1.0), key="tip")
    bounds = (
        Bound(response=motion, limit=0.5),
        Bound(response=Amount(name="mass", unit="", weight=np.full(SHAPE, 1 / 24),
                              factor=np.array([0.5, 1.0])), limit=0.4),
    )  # fmt: skip
    nominal = Physics(cases, (1, 1, 1), element="full", system=systems)
    goal = Goal(response=ComplianceResponse())
    projection = Projection(sharpness=(4.0,))
    return RobustProblem(u, nominal, goal, bounds, projection, Ensemble(**e), systems)


@settings(
    max_examples=2,
    deadline=None,
    suppress_health_check=[HealthCheck.function_scoped_fixture],  # they build, and keep nothing
)
@pytest.mark.parametrize(
    "kind", ["borders", "borders phases", "materials", "loads", "loads mean",
             "borders phases materials loads"]
)  # fmt: skip
@given(seed=st.integers(0, 999))
def test_gradients_over_an_ensemble(unknowns, cantilever, dense_system, kind, seed):
    # I3: the V over the step has its minimum below 1e-6.
    u = unknowns(SHAPE, [1.0, 20.0], [0.45, 0.35], floor=1e-2, density=[0.5, 1.0])
    u.blending.pure = "phases" in kind
    problem = ensemble_problem(u, cantilever(SHAPE, second=True), dense_system, kind)
    rng = np.random.default_rng(seed)
    x, direction = rng.uniform(0.35, 0.75, u.n), rng.standard_normal(u.n)
    problem.begin(1, ())
    e = problem.evaluate(x, 3.0)
    slope = e.dF @ direction
    errors = np.full(3, np.inf)
    for step in 10.0 ** np.arange(-3, -6.6, -0.5):
        up = problem.evaluate(x + step * direction, 3.0).F
        down = problem.evaluate(x - step * direction, 3.0).F
        errors = np.minimum(errors, np.abs((up - down) / (2 * step) - slope) / np.abs(slope))
    assert errors.max() < 1e-6


def resin(name, E, low=None, high=None, nu=0.35, density=1e-9):
    return Material(
        name=name, kind="rigid", E=Constant(value=E, low=low, high=high, unit="MPa"),
        nu=Constant(value=nu), density=Constant(value=density, unit="tonne/mm3"),
    )  # fmt: skip


def block(shape=(8, 3, 6), resins=None):
    resins = resins or (resin("soft", 10.0, 8.0, 12.0, 0.45), resin("rigid", 2000.0))
    grid = VoxelGrid(shape=shape, spacing=(1.0, 1.0, 1.0))
    return Part(
        grid=grid, resins=resins, palette=(EMPTY, Blend.pure("rigid")),
        labels=np.ones(shape, np.uint16),
    )  # fmt: skip


def tip(part, low=2.1, high=3.9):
    hx = part.grid.upper[0]
    return LoadCase(
        name="tip", supports=(Support(region=FaceRegion(name="wall", side="x-")),),
        loads=(Force(region=Box(name="edge", low=(hx - 0.1, -1, low), high=(hx + 1, 99, high)),
                     vector=(0, 0, -1)),),
    )  # fmt: skip


def spec(**kw):
    base = {
        "resins": ("rigid",), "objective": Compliance(), "filter_radius": 1.6,
        "limits": (VolumeLimit(fraction=0.5),), "iterations": 10,
        "projection": Projection(sharpness=(4.0, 8.0), every=5),
    }  # fmt: skip
    return DesignSpec(**{**base, **kw})


def test_eroded_is_softer_and_dilated_heavier_and_the_nominal_design_meets_the_limit():
    part = block()
    problem, _ = layout_problem(part, [tip(part)], spec(robust=Robust(margin=0.2)))
    assert isinstance(problem, RobustProblem)
    problem.physics.tolerance = 1e-8
    x = np.random.default_rng(1).uniform(0.2, 0.8, problem.unknowns.n)
    problem.begin(0, ())
    problem.physics.tolerance = 1e-8
    e = problem.evaluate(x, 4.0)
    # Judged by the eroded design; the nominal one is stiffer.
    assert e.F[0] > problem.objective.value(problem.physics)[0]
    # Just looked at: the scaled amount of the dilated design is that of the nominal one.
    (bound,) = problem.bounds
    amount = bound.response.value(problem.physics)[0]
    assert e.F[1] == pytest.approx(bound.excess(amount), rel=1e-9)
    assert bound.response.value(problem.ensemble.dilated.physics)[0] > amount


def test_a_resumed_robust_problem_is_the_same_to_the_bit():
    part = block()
    s = spec(robust=Robust(), scatter=(LoadScatter(angle=10.0),))
    problem, _ = layout_problem(part, [tip(part)], s)
    rng = np.random.default_rng(2)
    x, y = rng.uniform(0.2, 0.8, (2, problem.unknowns.n))
    problem.begin(0, ())
    problem.evaluate(x, 4.0)
    warm = problem.warm_state()
    problem.begin(1, ())
    want = problem.evaluate(y, 4.0)
    other, _ = layout_problem(part, [tip(part)], s)
    other.restore(warm)
    other.begin(1, ())
    got = other.evaluate(y, 4.0)
    np.testing.assert_array_equal(got.F, want.F)
    np.testing.assert_array_equal(got.dF, want.dF)


def test_resins_scatter_by_the_range_of_their_records():
    # Range 8 to 12 as +-2 deviations of log E: one deviation is log(12/8) / 4 (by hand).
    pairs = scattered_resins(MaterialScatter(band=2.0), list(block().resins))
    assert len(pairs) == 1  # the rigid one has no range
    assert np.log(pairs[0][0].stiffness[0]) == pytest.approx(np.log(1.5) / 4, rel=1e-12)
    assert pairs[0][0].stiffness[1] == 1.0
    with pytest.raises(InputError, match="no modulus has a range"):
        scattered_resins(MaterialScatter(), [resin("rigid", 2000.0)])


def test_a_mean_with_deviations_is_larger_where_the_material_scatters():
    part = block()
    limits = (MassLimit(mass=40e-9),)
    one = spec(resins=("soft", "rigid"), limits=limits)
    two = spec(resins=("soft", "rigid"), limits=limits, scatter=(MaterialScatter(deviations=3.0),))
    values = []
    for s in (one, two):
        problem, _ = layout_problem(part, [tip(part)], s)
        problem.begin(0, ())
        problem.physics.tolerance = 1e-9
        values.append(problem.evaluate(np.full(problem.unknowns.n, 0.5), 4.0).F[0])
    # All voxels blend alike, so E goes with the soft resin's to the power 1/2 and compliance
    # with its inverse: 3 deviations of 10 % / 2, and a little for the mean.
    assert 0.1 < values[1] / values[0] - 1 < 0.2


def test_loads_turn_and_move():
    force = np.zeros((3, 3, 3, 4))
    force[2, 1, 1, 1] = -2.0
    case = Case(name="a", weight=1.0, force=force, fixed=np.zeros(force.shape, bool))
    tilted = turned(case, np.array([1.0, 0, 0]), 30.0).force
    np.testing.assert_allclose(tilted[:, 1, 1, 1], [0, 1.0, -np.sqrt(3)], atol=1e-12)
    nodes = np.ones((3, 3, 4), bool)
    shifted = moved(case, "x", 0.5, (2.0, 1.0, 1.0), nodes).force
    np.testing.assert_allclose(shifted[2, 1, 1], [0, -1.5, -0.5, 0])
    back = moved(case, "x", -0.5, (2.0, 1.0, 1.0), nodes).force
    np.testing.assert_allclose(back[2, 1, 1], [-0.5, -1.5, 0, 0])
    with pytest.raises(InputError, match="acts beside the part"):
        moved(case, "z", 1.5, (2.0, 1.0, 1.0), nodes)
    nodes[:, :, 2] = False
    with pytest.raises(InputError, match="moved by 1 mm along x"):
        moved(case, "x", 1.0, (2.0, 1.0, 1.0), nodes)


def test_voxels_under_moved_loads_stay_solid():
    part = block()
    still, _ = layout_problem(part, [tip(part)], spec())
    scatter = LoadScatter(offset=1.0, axes=("z",))
    loose, _ = layout_problem(part, [tip(part)], spec(scatter=(scatter,)))
    assert loose.unknowns.choice.solid.sum() > still.unknowns.choice.solid.sum()
    pairs = loads_of(spec(scatter=(scatter,)), part, loose.physics.cases)
    assert len(pairs) == 1
    with pytest.raises(InputError, match="Scatter of load case 'tap': there are tip"):
        layout_problem(
            part, [tip(part)], spec(scatter=(LoadScatter(angle=5.0, load_cases=("tap",)),))
        )


def test_worst_load_is_not_below_the_nominal_one_for_least_mass():
    part = block()
    nodes = np.zeros(part.grid.node_shape, bool)
    nodes[-1] = True
    s = spec(
        objective=Minimise(measure=Mass()), scatter=(LoadScatter(angle=30.0),),
        limits=(AtMost(measure=Displacement(nodes=nodes, direction=(0, 0, -1)), value=0.01),),
    )  # fmt: skip
    problem, _ = layout_problem(part, [tip(part)], s)
    problem.begin(0, ())
    x = np.full(problem.unknowns.n, 0.7)
    worse = problem.evaluate(x, 4.0)
    plain, _ = layout_problem(part, [tip(part)], spec(objective=s.objective, limits=s.limits))
    plain.begin(0, ())
    best = plain.evaluate(x, 4.0)
    assert worse.F[0] == pytest.approx(best.F[0], rel=1e-9)  # a mass does not scatter
    assert worse.F[1] >= best.F[1] - 1e-6


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"robust": Robust(phases=True)}, "blends are free"),
        ({"robust": Robust(), "void": False, "resins": ("soft", "rigid")}, "borders that move"),
        ({"robust": Robust(), "projection": Projection(sharpness=(0.0,))}, "needs a projection"),
        ({"scatter": (LoadScatter(angle=1.0), LoadScatter(angle=2.0))}, "given twice"),
    ],
)
def test_rules_that_contradict_are_refused(change, words):
    with pytest.raises(InputError, match=words):
        spec(**change)


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: Robust(margin=0.5), "0.05 to 0.4"),
        (lambda: LoadScatter(), "needs an angle"),
        (lambda: LoadScatter(angle=70.0), "0 to 60 degrees"),
        (lambda: MaterialScatter(deviations=-1.0), "0 to 10"),
    ],
)
def test_values_out_of_range_are_refused(make, words):
    with pytest.raises(InputError, match=words):
        make()

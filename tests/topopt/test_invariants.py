"""What must hold of designs of several resins, whatever the objective."""

import numpy as np
import pytest
from measured_part import block, nodes_at, problem_of, pulled, resin, spec

from voxelmat.model.design_spec import Projection, ResinLimit, TargetDeflection, VolumeLimit
from voxelmat.model.goal import AtLeast, AtMost, Maximise, Minimise
from voxelmat.model.measure import Compliance, Displacement, WorstCompliance
from voxelmat.model.measure_amount import Cost, InterfaceArea, Mass, Perimeter
from voxelmat.topopt.optimise import optimise
from voxelmat.topopt.setup import layout_problem

SHAPE = (10, 2, 5)
PLAIN = Projection(sharpness=(0.0,))
RIGID = resin("rigid", 2000.0, 0.35, 1.0e-9, 50.0, 0.1, 200.0)
LIGHT = resin("light", 500.0, 0.35, 0.4e-9, 20.0, 0.2, 100.0)
MIDDLE = resin("middle", 900.0, 0.35, 0.6e-9, 30.0, 0.2, 400.0)


def lowest(part):
    """Node in the lower edge of the free end: what the load pushes down."""
    return Displacement(nodes=nodes_at(part, i=SHAPE[0], k=0), label="tip")


def test_second_resin_as_good_as_void_gives_the_density_answer():
    # A ghost that weighs nothing and is as soft as an empty voxel. Where none of it is used,
    # values are those of the density alone; free, it is a second way to be empty, which may help
    # to a better local optimum but not to a worse one.
    ghost = resin("ghost", 2e-3, 0.35, 1e-15, None, None, None)
    part = block(SHAPE, (RIGID, ghost))
    limit = (AtMost(measure=Mass(), value=0.4e-9 * 100),)
    kw = {"limits": limit, "projection": PLAIN, "iterations": 25, "method": "mma",
          "filter_radius": 1.2, "void_stiffness": 1e-4}  # fmt: skip
    names = {1: ("rigid",), 2: ("rigid", "ghost")}
    free = int(layout_problem(part, [pulled(part)], spec(resins=("rigid",), **kw))[0].unknowns.n)
    rho = np.random.default_rng(4).uniform(0.1, 1.0, free)
    alike = {
        1: spec(resins=names[1], **kw),
        2: spec(resins=names[2], **{**kw, "void_stiffness": 0.01}),
    }
    values = []
    for n, s in alike.items():
        x = np.concatenate([rho, np.zeros(100 * (n - 1))])
        _, value = problem_of(part, [pulled(part)], s, x=x)
        values.append([value(m) for m in (Compliance(), Mass(), lowest(part))])
    np.testing.assert_allclose(values[0], values[1], rtol=2e-3)
    one, two = (optimise(part, [pulled(part)], spec(resins=n, **kw)) for n in names.values())
    assert two.feasible
    assert two.objective <= 1.01 * one.objective


@pytest.mark.parametrize("goal", ["compliance", "motion", "worst"])
def test_two_resins_are_no_worse_than_the_better_one_at_equal_mass(goal):
    part = block(SHAPE, (RIGID, LIGHT))
    cases = [pulled(part)]
    if goal == "worst":
        cases = [pulled(part), pulled(part, (0, 0.5, 0), "side")]
    objective = {
        "compliance": Compliance(),
        "motion": Maximise(measure=lowest(part)),  # downwards is negative
        "worst": Minimise(measure=WorstCompliance()),
    }[goal]
    kw = {"objective": objective, "limits": (AtMost(measure=Mass(), value=0.3e-9 * 100),),
          "projection": PLAIN, "iterations": 25, "method": "mma"}  # fmt: skip
    found = {
        names: abs(optimise(part, cases, spec(resins=names, **kw)).objective)
        for names in (("rigid",), ("light",), ("rigid", "light"))
    }
    best = min(found["rigid",], found["light",])
    assert found["rigid", "light"] <= 1.005 * best


def test_permuted_resins_give_the_permuted_answer():
    part = block(SHAPE, (RIGID, LIGHT, MIDDLE))
    kw = {"objective": Maximise(measure=lowest(part)), "void": False, "iterations": 15,
          "limits": (AtMost(measure=Mass(), value=0.6e-9 * 100),
                     AtMost(measure=Cost(), value=0.016))}  # fmt: skip
    one, two = (
        optimise(part, [pulled(part)], spec(resins=order, **kw))
        for order in (("rigid", "light", "middle"), ("middle", "rigid", "light"))
    )
    assert one.objective == pytest.approx(two.objective, rel=1e-4)
    np.testing.assert_allclose(one.fractions, two.fractions[[1, 2, 0]], atol=5e-3)


def test_symmetric_problem_symmetric_answer():
    part = block((8, 4, 4), (RIGID, LIGHT))
    s = spec(
        resins=("rigid", "light"), objective=Minimise(measure=WorstCompliance()), iterations=12,
        limits=(AtMost(measure=Mass(), value=0.3e-9 * 128),),
    )  # fmt: skip
    result = optimise(part, [pulled(part)], s)
    np.testing.assert_allclose(result.density, result.density[:, ::-1], atol=1e-3)
    np.testing.assert_allclose(result.fractions, result.fractions[:, :, ::-1], atol=1e-3)


def test_less_surface_is_simpler_and_costs_stiffness():
    part = block(SHAPE, (RIGID,))
    volume = VolumeLimit(fraction=0.5)
    kw = {"resins": ("rigid",), "projection": PLAIN, "iterations": 35, "method": "mma"}
    free = optimise(part, [pulled(part)], spec(limits=(volume,), **kw))
    _, value = problem_of(part, [pulled(part)], spec(limits=(volume,), **kw), x=free.unknowns)
    limit = 0.7 * value(Perimeter())
    held = optimise(
        part, [pulled(part)],
        spec(limits=(volume, AtMost(measure=Perimeter(), value=limit)), **kw),
    )  # fmt: skip
    assert held.feasible
    assert held.constraints[1].value <= 1.001 * limit
    assert held.objective > 1.02 * free.objective


def test_as_much_and_as_little_area_between_resins_as_a_stiffness_allows():
    part = block((8, 2, 4), (RIGID, LIGHT))
    kw = {"resins": ("rigid", "light"), "void": False, "iterations": 25, "filter_radius": 1.2}
    share = ResinLimit(resin="rigid", fraction=0.5)
    stiff = optimise(part, [pulled(part)], spec(limits=(share,), **kw))
    enough = AtMost(measure=Compliance(), value=1.3 * stiff.objective)
    some = AtLeast(measure=Compliance(), value=1.05 * stiff.objective)
    areas = [
        optimise(part, [pulled(part)], spec(objective=sense(measure=InterfaceArea()),
                                            limits=(share, enough, some), **kw))
        for sense in (Minimise, Maximise)
    ]  # fmt: skip
    assert all(a.feasible for a in areas)
    assert areas[1].objective > 2 * areas[0].objective


def test_worst_error_of_a_target_is_less_than_that_of_the_mean_error():
    part = block((8, 8, 4), (resin("soft", 1.0, 0.45, 1e-9, 2.0, 1.5, 1.0), RIGID))
    load = pulled(part, (0, 0, -0.4))
    nodes = nodes_at(part, k=4)
    x = np.linspace(0, 1, 9)[:, None, None]
    y = np.linspace(-1, 1, 9)[None, :, None]
    target = -0.8 * (x**2 + 0.3 * x * y) * np.ones(part.grid.node_shape)
    kw = {"resins": ("soft", "rigid"), "void": False, "iterations": 60, "filter_radius": 1.5}
    asked = [TargetDeflection(nodes=nodes, target=target, error=e) for e in ("rms", "worst")]
    rms, worst = (
        optimise(part, [load], spec(objective=Minimise(measure=m), limits=(), **kw)) for m in asked
    )
    _, value = problem_of(part, [load], spec(objective=asked[0], limits=(), **kw), x=rms.unknowns)
    assert worst.objective_name == "worst error of the deflection"
    assert worst.objective < value(asked[1])
    # As a limit, the error itself counts, not its square.
    limited = spec(
        objective=Minimise(measure=Cost()), limits=(AtMost(measure=asked[0], value=0.1),), **kw
    )
    result = optimise(part, [load], limited)
    assert result.constraints[0].value <= 0.1001

"""Measures as objectives and limits: contradictions refused, small designs end to end."""

import numpy as np
import pytest
from measured_part import SHAPE, block, nodes_at, problem_of, pulled, spec

from voxelmat.errors import InputError
from voxelmat.model.design_spec import Projection, ResinLimit, VolumeLimit
from voxelmat.model.goal import AtLeast, AtMost, Maximise, Minimise
from voxelmat.model.measure import Compliance, Displacement, OutputOfMechanism, WorstCompliance
from voxelmat.model.measure_amount import (
    CentreOfMass,
    Cost,
    InterfaceArea,
    Mass,
    Perimeter,
    ResinVolume,
    Volume,
)
from voxelmat.topopt.optimise import optimise


# ---------------------------------------------------------------------- contradictions
def mask(*at):
    out = np.zeros(SHAPE, bool)
    out[at] = True
    return out


TIP = nodes_at(block(), i=8)
BAD = {
    "more than reachable": (
        {"limits": (AtLeast(measure=Volume(), value=0.9),), "empty": mask(slice(2, 6))},
        "must be at least 0.900 of the shape's volume, but filling everything that may be filled "
        "only gives 0.500",
    ),
    "mass that its volume cannot have": (
        {"limits": (AtMost(measure=Mass(), value=20e-9), AtLeast(measure=Volume(), value=0.5))},
        "No design meets all of these at once: mass at most .*, solid volume at least 0.500",
    ),
    "at least more than at most": (
        {"limits": (AtLeast(measure=Displacement(nodes=TIP), value=-0.1),
                    AtMost(measure=Displacement(nodes=TIP), value=-0.2))},
        "at least -0.100 and at most -0.200; no design can be both",
    ),
    "one of two amounts that cannot both be": (
        {"limits": (AtLeast(measure=ResinVolume(resin="soft"), value=0.6),
                    AtLeast(measure=ResinVolume(resin="rigid"), value=0.6))},
        "No design meets all of these at once",
    ),
    "limit of 0 without a scale": (
        {"limits": (AtMost(measure=Displacement(nodes=TIP), value=0.0),)}, "give it a scale"
    ),
    "least mass alone": ({"objective": Minimise(measure=Mass()), "limits": ()}, "without a limit"),
    "volume without voids": (
        {"void": False, "limits": (AtLeast(measure=Volume(), value=0.5),)}, "allows no empty voxels"
    ),
    "41 resins": (
        {"resins": tuple(f"r{n}" for n in range(41))}, "at most 40 resins; got 41"
    ),
    "one resin, no voids": ({"resins": ("rigid",), "void": False}, "nothing to design"),
    "no measure": ({"objective": Minimise(measure=VolumeLimit(fraction=0.5))}, "no measure"),
    "a class": (lambda: Minimise(measure=Mass), "takes a measure"),
    "nodes in the air": (
        {"objective": Minimise(measure=Displacement(nodes=np.ones((2, 2, 2), bool)))},
        "nodes of shape",
    ),
    "objective that nothing changes": (
        {"objective": Minimise(measure=Mass(region=mask(slice(4, 6)))), "solid": mask(slice(4, 6)),
         "fixed_resin": {"soft": mask(slice(4, 6))}, "limits": (VolumeLimit(fraction=0.5),)},
        "No unknown of this design changes the mass",
    ),
    "motion of what is held": (
        {"objective": Maximise(measure=Displacement(nodes=nodes_at(block(), i=0)))},
        "No unknown of this design changes the mean displacement",
    ),
    "mechanism without a push": (
        {"objective": Maximise(measure=OutputOfMechanism(
            output=TIP, input=nodes_at(block(), i=4), output_direction=(0, 0, 1),
            input_direction=(0, 0, 1), output_stiffness=1.0, input_stiffness=1.0))},
        "puts no force on the input",
    ),
    "resin without a price": (
        {"resins": ("plain", "rigid"), "limits": (AtMost(measure=Cost(), value=1.0),)},
        "needs the cost per kg of plain",
    ),
    "surface without voids": (
        {"void": False, "objective": Minimise(measure=Perimeter()),
         "limits": (ResinLimit(resin="soft", fraction=0.6),)},
        "no surface of its own",
    ),
    "interface of one resin": (
        {"resins": ("rigid",), "objective": Minimise(measure=InterfaceArea())}, "one resin"
    ),
}  # fmt: skip


@pytest.mark.parametrize("what", BAD)
def test_contradictions_are_refused(what):
    change, message = BAD[what]
    part = block()

    def ask():
        s = change() if callable(change) else spec(**change)
        optimise(part, [pulled(part)], s)

    with pytest.raises(InputError, match=message):
        ask()


# ---------------------------------------------------------------------- designs
def test_general_limits_are_the_simple_ones():
    part = block()
    one = optimise(part, [pulled(part)], spec())
    two = optimise(
        part, [pulled(part)],
        spec(objective=Minimise(measure=Compliance()),
             limits=(AtMost(measure=Volume(), value=0.5),)),
    )  # fmt: skip
    assert [r.objective for r in one.history] == [r.objective for r in two.history]
    np.testing.assert_array_equal(one.density, two.density)


def test_least_mass_for_a_stiffness_is_the_other_way_round():
    # The lightest part of a compliance weighs what the stiffest part of a mass weighs.
    part = block()
    stiff = optimise(
        part, [pulled(part)],
        spec(resins=("rigid",), limits=(AtMost(measure=Mass(), value=40e-9),), iterations=40,
             projection=Projection(sharpness=(0.0,)), method="mma"),
    )  # fmt: skip
    light = optimise(
        part, [pulled(part)],
        spec(resins=("rigid",), objective=Minimise(measure=Mass()), iterations=40,
             limits=(AtMost(measure=Compliance(), value=stiff.objective),),
             projection=Projection(sharpness=(0.0,))),
    )  # fmt: skip
    assert light.feasible
    assert light.objective == pytest.approx(40e-9, rel=0.02)


def test_worst_case_is_no_worse_than_that_of_the_sum():
    part = block((8, 4, 4))
    cases = [pulled(part, (0, 0, -1), "down"), pulled(part, (0, 2, 0), "across")]
    kw = {"resins": ("rigid",), "iterations": 30, "projection": Projection(sharpness=(0.0,)),
          "limits": (VolumeLimit(fraction=0.4),), "method": "mma"}  # fmt: skip
    total = optimise(part, cases, spec(**kw))
    worst = optimise(part, cases, spec(objective=Minimise(measure=WorstCompliance()), **kw))

    def greatest(result):
        x = result.unknowns
        _, value = problem_of(part, cases, spec(**kw), x=x)
        return value(WorstCompliance())

    assert worst.objective_name == "greatest compliance"
    assert worst.objective == pytest.approx(greatest(worst), rel=1e-3)
    assert greatest(worst) < 0.995 * greatest(total)
    # As a limit every case keeps it by itself.
    limit = 1.1 * worst.objective
    least = optimise(
        part, cases,
        spec(**{**kw, "objective": Minimise(measure=Volume()),
                "limits": (AtMost(measure=WorstCompliance(), value=limit),)}),
    )  # fmt: skip
    assert [c.name for c in least.constraints] == ["compliance of 'down'", "compliance of 'across'"]
    assert least.feasible
    assert least.objective < 0.41


def test_lower_limits_and_the_centre_of_mass():
    part = block()
    limits = (
        AtMost(measure=Volume(), value=0.5),
        AtLeast(measure=CentreOfMass(axis="x"), value=4.2),
        AtLeast(measure=ResinVolume(resin="soft"), value=0.1),
    )
    free = optimise(part, [pulled(part)], spec(limits=limits[:1], iterations=20))
    held = optimise(part, [pulled(part)], spec(limits=limits, iterations=25))
    assert held.feasible
    assert [c.at_least for c in held.constraints] == [False, True, True]
    assert held.constraints[1].value >= 4.19
    assert held.constraints[2].value >= 0.0999
    assert held.objective >= free.objective


@pytest.mark.parametrize("sense", [Minimise, Maximise])
def test_motion_of_a_point_both_ways(sense):
    part = block()
    measure = Displacement(nodes=nodes_at(part, i=8, k=0, j=1), label="the tip")
    s = spec(objective=sense(measure=measure), iterations=15)
    result = optimise(part, [pulled(part)], s)
    first, last = result.history[0].objective, result.objective
    # The tip is pushed down: the greatest motion along +z is the stiffest part.
    assert (last > first) == (sense is Maximise)
    assert abs(last - first) > 0.2 * abs(first)
    assert result.objective_name == "mean displacement of the tip"

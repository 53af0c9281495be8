"""From a design to a part: palette from its error, values at every stage, prices, reach."""

import dataclasses

import numpy as np
import pytest

from voxelmat.errors import InputError
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.design_spec import Compliance, DesignSpec, MassLimit, Projection, VolumeLimit
from voxelmat.model.design_stages import Price, Reach, StagedValue
from voxelmat.model.goal import AtLeast, AtMost, Minimise
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.loadcase import Force, LoadCase, Support
from voxelmat.model.material import Constant, Material
from voxelmat.model.measure import Displacement
from voxelmat.model.measure_amount import Mass
from voxelmat.model.part import Part
from voxelmat.model.region import Box, FaceRegion
from voxelmat.topopt.feasibility import check_reach, reachable, worth_checking
from voxelmat.topopt.made import values_of_part
from voxelmat.topopt.optimise import optimise
from voxelmat.topopt.prices import multipliers

SHAPE = (10, 3, 5)


def resin(name, E, density):
    return Material(
        name=name, kind="rigid", E=Constant(value=E, unit="MPa"), nu=Constant(value=0.35),
        density=Constant(value=density, unit="tonne/mm3"),
    )  # fmt: skip


LIGHT, HEAVY = resin("light", 20.0, 0.5e-9), resin("heavy", 2000.0, 1.2e-9)


def block():
    grid = VoxelGrid(shape=SHAPE, spacing=(1.0, 1.0, 1.0))
    labels = np.ones(SHAPE, np.uint16)
    palette = (EMPTY, Blend.pure("light"))
    return Part(grid=grid, resins=(LIGHT, HEAVY), palette=palette, labels=labels)


def tip():
    return LoadCase(
        name="tip",
        supports=(Support(region=FaceRegion(name="wall", side="x-")),),
        loads=(Force(region=Box(name="edge", low=(8.9, -1, -1), high=(11, 9, 1.1)),
                     vector=(0, 0, -1)),),
    )  # fmt: skip


def spec(**kw):
    base = {
        "resins": ("light", "heavy"), "objective": Compliance(), "filter_radius": 1.6,
        "limits": (MassLimit(mass=1.2e-7),), "iterations": 24, "void": False,
        "projection": Projection(sharpness=(0.0,)),
    }  # fmt: skip
    return DesignSpec(**{**base, **kw})


@pytest.fixture(scope="module")
def blended():
    return optimise(block(), [tip()], spec())


def test_the_part_has_the_values_that_the_result_says(blended):
    goal, mass = blended.stages
    assert (goal.sense, goal.limit) == ("least", None)
    assert (mass.name, mass.sense, mass.limit) == ("mass", "at most", 1.2e-7)
    assert goal.optimised == pytest.approx(blended.objective)
    again = values_of_part(block(), blended.part, [tip()], spec())
    assert again == pytest.approx([goal.palette, mass.palette], rel=1e-4)
    assert mass.palette == pytest.approx(blended.part.mass, rel=1e-3)


def test_fewer_levels_cost_more_and_the_smallest_good_number_is_found(blended):
    def cost(result):
        return abs(result.objective_of_palette / result.objective - 1)

    start = blended.unknowns
    short = spec(iterations=1)
    allowed = 0.01
    chosen = optimise(block(), [tip()], dataclasses.replace(short, palette_error=allowed),
                      start=start)  # fmt: skip
    count = len(chosen.part.palette) - 1
    assert 2 <= count < 64
    assert cost(chosen) <= allowed
    fewer = optimise(block(), [tip()], dataclasses.replace(short, levels=max(2, count // 2)),
                     start=start)  # fmt: skip
    assert cost(fewer) > allowed
    one = optimise(block(), [tip()], dataclasses.replace(short, palette_error=1e-9, levels=4),
                   start=start)  # fmt: skip
    assert any("allow more levels" in n for n in one.notes)


def test_a_price_is_what_moving_the_limit_does(blended):
    """Checked by running again with the limit 2 % up and 2 % down (central difference)."""
    (price,) = blended.prices
    assert price.slope < 0
    assert "buys" in price.sentence
    assert "g more" in price.sentence
    step = 0.02 * price.limit
    moved = [
        optimise(block(), [tip()], spec(limits=(MassLimit(mass=price.limit + d),)),
                 start=blended.unknowns).objective
        for d in (-step, step)
    ]  # fmt: skip
    assert (moved[1] - moved[0]) / (2 * step) == pytest.approx(price.slope, rel=0.05)


def test_multipliers_of_a_small_programme():
    """min (x-2)^2 + (y-2)^2 + z, x + y <= 2, z >= 0 in the box [0, 3]: x = y = 1, both 2."""
    x = np.array([1.0, 1.0, 0.0])
    dF = np.array([[-2.0, -2.0, 1.0], [1.0, 1.0, 0.0]])
    assert multipliers(x, np.zeros(3), np.full(3, 3.0), dF) == pytest.approx([2.0], rel=1e-6)
    assert multipliers(x, np.zeros(3), np.full(3, 3.0), dF[:1]).shape == (0,)


def test_compliance_below_that_of_the_solid_stiffest_resin_is_refused():
    asked = spec(objective=Minimise(measure=Mass()),
                 limits=(AtMost(measure=Compliance(), value=1e-3),))  # fmt: skip
    assert worth_checking(asked)
    assert not worth_checking(spec())
    found = reachable(block(), [tip()], asked)
    mass, work = found
    assert work.bound
    assert work.of_least == "all heavy"
    assert work.of_greatest == "all light"
    assert work.greatest == pytest.approx(100 * work.least, rel=1e-3)  # E is 100 times as large
    assert mass.greatest == pytest.approx(150 * 1.2e-9)
    with pytest.raises(InputError, match="out of reach"):
        check_reach(found)
    ok = dataclasses.replace(work, limit=2 * work.least)
    assert check_reach([mass, ok]) == ()


def test_what_was_only_tried_is_told_and_not_refused():
    nodes = np.zeros((11, 4, 6), bool)
    nodes[10, :, 0] = True
    asked = spec(limits=(
        AtLeast(measure=Displacement(nodes=nodes, direction=(0, 0, 1)), value=1.0),
        VolumeLimit(fraction=0.5),
    ), void=True)  # fmt: skip
    (told,) = check_reach(reachable(block(), [tip()], asked))
    assert "of the designs tried" in told


def test_words():
    value = StagedValue(name="mass", unit="tonne", sense="at most", limit=2e-6, optimised=2e-6,
                        palette=2.001e-6, printed=2.2e-6)  # fmt: skip
    (remark,) = value.remarks
    assert (
        remark
        == "As printed the mass is 2.20 g instead of 2.00 (at most 2.00), which breaks the limit."
    )
    lost = dataclasses.replace(value, palette=np.nan, printed=None)
    assert "does not hang together" in lost.remarks[0]
    lower = dataclasses.replace(value, sense="at least", optimised=3e-6, palette=1e-6)
    assert not lower.met(lower.palette)
    price = Price(name="mass", unit="tonne", sense="at most", limit=1e-4, objective="deflection",
                  objective_value=2.0, slope=-6e4)  # fmt: skip
    assert price.sentence == "Mass: 1.00 g more (1 % of the limit) buys 3.0 % less deflection."
    reach = Reach(name="frequency", unit="Hz", sense="at least", limit=500.0, least=10.0,
                  greatest=400.0, of_least="soft", of_greatest="hard", bound=False)  # fmt: skip
    assert reach.missed_by == pytest.approx(100.0)
    assert "100 Hz out of reach" in reach.sentence

"""A compliant mechanism that turns a push round: symmetry, scaling, springs, refinement.

The force inverter between two springs is a standard problem (O. Sigmund, Mech. Struct. Mach. 25
(1997) 493, from memory), but no value of it on this kind of grid is at hand; so the tests are of
what must hold.
"""

import numpy as np
import pytest
from measured_part import resin, spec

from voxelmat.errors import InputError
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.design_spec import Projection, VolumeLimit
from voxelmat.model.goal import Maximise, Minimise
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.loadcase import Force, LoadCase, Support
from voxelmat.model.measure import OutputOfMechanism
from voxelmat.model.part import Part
from voxelmat.model.region import Box, FaceRegion
from voxelmat.topopt.optimise import optimise

THICK, LENGTH, HALF = 2.0, 40.0, 20.0


def inverter(n, *, whole=False, output=0.1, unit=1.0, **kw):
    """Anchored at the far left corners, pushed at the left end of the axis by 1 N over 1 N/mm.

    n voxels along the length; the upper half alone, or the whole; `unit`: of forces and moduli.
    """
    h = LENGTH / n
    shape = (n, n if whole else n // 2, round(THICK / h))
    grid = VoxelGrid(shape=shape, spacing=(h, h, h))
    resins = (resin("stiff", unit, 0.3, 1e-9, None, None, None),)
    part = Part(
        grid=grid, resins=resins, palette=(EMPTY, Blend.pure("stiff")),
        labels=np.ones(shape, np.uint16),
    )  # fmt: skip
    axis, top = (HALF, 2 * HALF) if whole else (0.0, HALF)
    supports = [
        Support(region=Box(name="anchor", low=(-1, top - 2.01, -1), high=(0.01, top + 1, 9))),
        Support(region=FaceRegion(name="back", side="z-"), displacement=(None, None, 0)),
    ]
    if whole:
        supports.append(Support(region=Box(name="low", low=(-1, -1, -1), high=(0.01, 2.01, 9))))
    else:
        supports.append(
            Support(region=FaceRegion(name="axis", side="y-"), displacement=(None, 0, None))
        )
    share = unit * (1.0 if whole else 0.5)
    push = Force(
        region=Box(name="push", low=(-1, axis - 2.01, -1), high=(0.01, axis + 2.01, 9)),
        vector=(share, 0, 0),
    )
    near = np.abs(grid.nodes()[1] - axis) < 2.01
    ends = np.zeros((2, *grid.node_shape), bool)
    ends[0, 0, near], ends[1, -1, near] = True, True
    measure = OutputOfMechanism(
        input=ends[0], output=ends[1], input_direction=(1, 0, 0), output_direction=(1, 0, 0),
        input_stiffness=share, output_stiffness=share * output,
    )  # fmt: skip
    s = spec(
        **{"resins": ("stiff",), "objective": Minimise(measure=measure), "filter_radius": 3.0,
           "limits": (VolumeLimit(fraction=0.3),), "void_law": "plain", "iterations": 40,
           "projection": Projection(sharpness=(0.0,)), **kw}
    )  # fmt: skip
    case = LoadCase(name="push", supports=tuple(supports), loads=(push,))
    return optimise(part, [case], s)


@pytest.fixture(scope="module")
def half():
    return inverter(20)


def test_push_is_turned_round(half):
    # The uniform start moves with the push; the mechanism moves against it.
    assert half.history[0].objective > 0
    assert half.objective < -0.2
    assert half.feasible
    assert half.objective_unit == "mm"
    assert half.objective_name == "output of the mechanism"
    # Springs are in the preconditioner; left out of it, CG took up to 37 iterations a solve.
    assert max(r.cg_iterations for r in half.history) / 2 < 15


def test_symmetric_problem_symmetric_answer(half):
    whole = inverter(20, whole=True)
    assert whole.objective == pytest.approx(half.objective, rel=0.01)
    np.testing.assert_allclose(whole.density, whole.density[:, ::-1], atol=0.02)
    forced = inverter(20, whole=True, symmetry=("y",), iterations=10)
    np.testing.assert_allclose(forced.density, forced.density[:, ::-1], atol=1e-6)


def test_units_of_force_do_not_matter(half):
    # Moduli, springs and forces ten times as large: the same motions, so the same design.
    stronger = inverter(20, unit=10.0)
    assert stronger.objective == pytest.approx(half.objective, rel=1e-3)
    np.testing.assert_allclose(stronger.density, half.density, atol=0.02)


def test_a_stiffer_workpiece_moves_less_and_is_pushed_harder(half):
    stiffer = inverter(20, output=0.4)
    assert half.objective < stiffer.objective < 0
    assert 0.4 * abs(stiffer.objective) > 0.1 * abs(half.objective)


def test_finer_grid_same_optimum_within_a_band(half):
    fine = inverter(40, iterations=50)
    assert fine.objective == pytest.approx(half.objective, rel=0.15)


def test_ends_are_checked():
    shape = (3, 3, 3)
    one, two = np.zeros((2, *shape), bool)
    one[0], two[-1] = True, True
    good = {"input": one, "output": two, "input_direction": (1, 0, 0),
            "output_direction": (0, 0, -2), "input_stiffness": 1.0,
            "output_stiffness": 0.0}  # fmt: skip
    assert Maximise(measure=OutputOfMechanism(**good)).measure.output_direction == (0, 0, -1)
    for change, message in (
        ({"output": one}, "share nodes"),
        ({"input": one & False}, "selects no node"),
        ({"input_direction": (1, 1, 0)}, "acts along x, y or z"),
        ({"output_stiffness": -1.0}, "needs >= 0 N/mm"),
        ({"output_direction": (0, 0, 0)}, "must not be zero"),
    ):
        with pytest.raises(InputError, match=message):
            OutputOfMechanism(**{**good, **change})

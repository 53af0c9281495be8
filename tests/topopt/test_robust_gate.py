"""Records of robust designs: how much is thinner than two voxels, and what it costs."""

import numpy as np
import pytest
from scipy.ndimage import binary_opening

from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.design_rules import Robust
from voxelmat.model.design_spec import Compliance, DesignSpec, Projection, VolumeLimit
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.loadcase import Force, LoadCase, Support
from voxelmat.model.material import Constant, Material
from voxelmat.model.part import Part
from voxelmat.model.region import Box, FaceRegion
from voxelmat.topopt.ensemble import Ensemble, Scenario, SharedSystems
from voxelmat.topopt.fields import Realisation
from voxelmat.topopt.limits import Bound, Goal
from voxelmat.topopt.loop import State, Stopping, run
from voxelmat.topopt.mma import MovingAsymptotes
from voxelmat.topopt.optimise import optimise
from voxelmat.topopt.physics import Physics
from voxelmat.topopt.problem import LayoutProblem
from voxelmat.topopt.responses import Amount, ComplianceResponse
from voxelmat.topopt.robust import RobustProblem
from voxelmat.topopt.sizes import lost_to_opening

SHAPE = (12, 12, 36)


def design(unknowns, cantilever, margin):
    """Compliance and the share of solid lost to an opening of 2^3, of the nominal design."""
    u = unknowns(SHAPE, [2000.0], [0.35], radius=2.5)
    volume = Amount(name="volume", unit="", weight=np.full(SHAPE, 1 / np.prod(SHAPE)),
                    factor=np.ones(1))  # fmt: skip
    bounds = (Bound(response=volume, limit=0.3),)
    steps = Projection(sharpness=(1.0, 2.0, 4.0, 8.0, 16.0, 32.0), every=15)
    goal, systems = Goal(response=ComplianceResponse()), SharedSystems()

    def physics():
        return Physics(cantilever(SHAPE), (1, 1, 1), tolerance=1e-4, system=systems)

    if margin == 0:
        problem = LayoutProblem(u, physics(), goal, bounds, steps)
    else:
        eroded, dilated = (
            Scenario(realisation=Realisation(threshold=t), physics=physics())
            for t in (margin, -margin)
        )
        problem = RobustProblem(
            u, physics(), goal, bounds, steps, Ensemble(eroded=eroded, dilated=dilated), systems
        )
    x = np.full(u.n, 0.3)
    stepper = MovingAsymptotes(problem.low, problem.high, move=0.2, back="none")
    never = Stopping(gap=0.0, change=0.0)
    out = run(problem, stepper, State(x=x, whole=x), iterations=100, stopping=never)
    fields = u.forward(out.state.whole)
    nominal = physics()
    nominal.update(fields)
    assert fields.rho.mean() <= 0.3 * 1.01
    return ComplianceResponse().value(nominal)[0], lost_to_opening(fields.rho > 0.5, goes_on=True)


@pytest.mark.slow
def test_robust_designs_have_little_that_is_thin(unknowns, cantilever):
    # Records of an earlier program of ours at filter radius 2.5: 3.7 % of the solid lost to a 2^3
    # opening without, .9 % at thresholds .4/.6 (compliance +12 %), .5 % at .3/.7 (+21 %).
    # Reached here: 3.7 %; .6 % (+13 %); 1.7 % (+28 %).
    found = {m: design(unknowns, cantilever, m) for m in (0.0, 0.1, 0.2)}
    assert found[0.1][1] <= 0.009
    assert found[0.1][0] <= 1.15 * found[0.0][0]
    assert found[0.2][1] <= 0.5 * found[0.0][1]


@pytest.mark.slow
def test_walls_at_the_surface_of_the_shape_are_no_thinner_than_those_inside():
    # Without: a quarter of the solid is walls of one voxel at the shape's faces, where a filter
    # sees half a cone. Reached: 24.5 % without, 1.0 % with, at no more compliance.
    lost, compliance = [], []
    shape = (36, 12, 12)
    rigid = Material(
        name="rigid", kind="rigid", E=Constant(value=2000.0, unit="MPa"),
        nu=Constant(value=0.35), density=Constant(value=1e-9, unit="tonne/mm3"),
    )  # fmt: skip
    part = Part(
        grid=VoxelGrid(shape=shape, spacing=(1.0, 1.0, 1.0)), resins=(rigid,),
        palette=(EMPTY, Blend.pure("rigid")), labels=np.ones(shape, np.uint16),
    )  # fmt: skip
    edge = Box(name="edge", low=(35.9, -1, -1), high=(37, 99, 1.1))
    tip = LoadCase(
        name="tip", supports=(Support(region=FaceRegion(name="wall", side="x-")),),
        loads=(Force(region=edge, vector=(0, 0, -1)),),
    )  # fmt: skip
    frozen = np.zeros(shape, bool)
    frozen[0], frozen[-1, :, :2] = True, True
    for robust in (None, Robust(margin=0.1)):
        spec = DesignSpec(
            resins=("rigid",), objective=Compliance(), limits=(VolumeLimit(fraction=0.3),),
            filter_radius=2.5, iterations=80, method="mma", robust=robust,
            projection=Projection(sharpness=(1.0, 2.0, 4.0, 8.0, 16.0), every=12),
        )  # fmt: skip
        result = optimise(part, [tip], spec)
        solid = result.density > 0.5
        thin = solid & ~binary_opening(solid, np.ones((2, 2, 2), bool)) & ~frozen
        lost.append(thin.sum() / solid.sum())
        compliance.append(result.objective)
    assert lost[0] > 0.1
    assert lost[1] <= 0.015
    assert compliance[1] <= 1.02 * compliance[0]

"""Trapped support: gradients, a cavity and a channel told apart, a cavity designed away."""

import numpy as np
import pytest
import scipy.ndimage
from design_gradients import smallest_error
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.design_spec import Projection
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.laws import LogMix
from voxelmat.model.material import Constant, Material
from voxelmat.model.measure_physics import TrappedSupport
from voxelmat.model.part import Part
from voxelmat.model.region import Box, FaceRegion
from voxelmat.topopt.interpolation import VoidLaw
from voxelmat.topopt.limits import Bound, Goal
from voxelmat.topopt.loop import State, Stopping, run
from voxelmat.topopt.mma import MovingAsymptotes
from voxelmat.topopt.physics import Case, Physics
from voxelmat.topopt.problem import LayoutProblem
from voxelmat.topopt.response_trapped import trapped_response
from voxelmat.topopt.responses import Amount, ComplianceResponse
from voxelmat.topopt.unknowns import Choice, Palette, Unknowns

SPACING = (1.0, 0.9, 1.2)
RESIN = Material(
    name="resin", kind="rigid", E=Constant(value=100.0, unit="MPa"), nu=Constant(value=0.3),
    density=Constant(value=1.1e-9, unit="tonne/mm3"),
)  # fmt: skip


def part(shape, solid=None, spacing=SPACING):
    labels = np.ones(shape, np.uint16) if solid is None else solid.astype(np.uint16)
    return Part(
        grid=VoxelGrid(shape=shape, spacing=spacing), resins=(RESIN,),
        palette=(EMPTY, Blend.pure("resin")), labels=labels,
    )  # fmt: skip


def enclosed(density):
    """Empty voxels (nz, ny, nx) that no path through faces leads out of."""
    pieces, _ = scipy.ndimage.label(np.pad(density < 0.5, 1, constant_values=True))
    return int(((pieces > 0) & (pieces != pieces[0, 0, 0])).sum())


@settings(
    max_examples=8, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(seed=st.integers(0, 10**6), closed=st.booleans(), exponent=st.sampled_from([2.0, 6.0]))
def test_gradient_against_central_differences(unknowns, seed, closed, exponent):
    # I3: V over the step, minimum < 1e-6.
    p = part((4, 3, 3))
    u = unknowns((3, 3, 4), [100.0], [0.3], spacing=SPACING)
    u.sharpness = 1.0
    shut = FaceRegion(name="floor", side="z-") if closed else None
    r = trapped_response(TrappedSupport(closed=shut, exponent=exponent), p, u)
    error, *_ = smallest_error(u, r, Physics((), SPACING, tolerance=1e-12), seed=seed)
    assert error < 1e-6


def value_of(unknowns, density, measure=None, solid=None):
    p = part(density.shape[::-1], solid, spacing=(1.0, 1.0, 1.0))
    u = unknowns(density.shape, [100.0], [0.3], radius=0.5)
    physics = Physics((), (1.0, 1.0, 1.0), tolerance=1e-9)
    physics.update(u.forward(density.ravel()))
    return trapped_response(measure or TrappedSupport(), p, u).value(physics)[0]


def test_a_cavity_is_hot_and_one_with_a_channel_is_not(unknowns):
    density = np.ones((9, 9, 9))
    assert value_of(unknowns, density) < 1e-9
    assert value_of(unknowns, np.zeros((9, 9, 9))) == pytest.approx(1.0, rel=1e-8)
    density[3:6, 3:6, 3:6] = 0.0
    shut = value_of(unknowns, density)
    assert enclosed(density) == 27
    density[6:, 4, 4] = 0.0
    channel = value_of(unknowns, density)
    assert enclosed(density) == 0
    density[6:, 3:6, 3:6] = 0.0
    wide = value_of(unknowns, density)
    assert shut > 5 * channel > 10 * wide
    assert wide < 4 < 10 < channel < 20 < 100 < shut


def test_a_channel_to_a_closed_face_does_not_help(unknowns):
    density = np.ones((7, 7, 7))
    density[2:, 2:5, 2:5] = 0.0  # open towards z+
    lid = TrappedSupport(closed=FaceRegion(name="lid", side="z+"))
    assert value_of(unknowns, density) < 0.1 * value_of(unknowns, density, lid)


def test_it_hardly_depends_on_the_grid(unknowns):
    density = np.ones((5, 5, 5))
    density[1:4, 1:4, 1:4] = 0.0
    p = part((10, 10, 10), spacing=(0.5, 0.5, 0.5))
    u = unknowns((10, 10, 10), [100.0], [0.3], radius=0.1)
    physics = Physics((), (0.5, 0.5, 0.5), tolerance=1e-9)
    fine = density.repeat(2, 0).repeat(2, 1).repeat(2, 2)
    physics.update(u.forward(fine.ravel()))
    found = trapped_response(TrappedSupport(), p, u).value(physics)[0]
    assert found == pytest.approx(value_of(unknowns, density), rel=0.15)


def beam(limit):
    """Stiffest beam of 8 x 8 x 12 voxels at 60 % of the volume; (compliance, density)."""
    shape = (8, 8, 12)
    off, plate = np.zeros(shape, bool), np.zeros(shape, bool)
    plate[..., -2:] = True
    choice = Choice(
        domain=~off, solid=plate, empty=off, resin=np.full(shape, -1), fill=np.ones(shape),
        kept_lam=np.zeros(shape), kept_mu=np.zeros(shape), mirrors=(0, 1),
    )  # fmt: skip
    palette = Palette(
        names=("resin",), bulk=np.array([100 / 3 / 0.4]), shear=np.array([100 / 2.6]),
        density=np.ones(1), law=LogMix(),
    )  # fmt: skip
    h = (1.0, 1.0, 1.0)
    void = VoidLaw(penalty=3.0, kind="bounded", floor_shear=4e-5, floor_lame=6e-5)
    u = Unknowns(choice, palette, void=void, spacing=h, radius=1.5)
    fixed = np.zeros((3, 9, 9, 13), bool)
    fixed[..., 0] = True
    force = np.zeros(fixed.shape)
    force[2, ..., -1] = -1 / 81
    physics = Physics((Case(name="tip", weight=1.0, force=force, fixed=fixed),), h, tolerance=1e-4)
    volume = Amount(name="volume", unit="", weight=np.full(shape, 1 / off.size), factor=np.ones(1))
    trapped = trapped_response(TrappedSupport(), part(shape[::-1], spacing=h), u)
    bounds = [Bound(response=volume, limit=0.6)]
    if limit is not None:
        bounds.append(Bound(response=trapped, limit=limit))
    problem = LayoutProblem(
        u, physics, Goal(response=ComplianceResponse()), tuple(bounds),
        Projection(sharpness=(0.0, 2.0, 4.0, 8.0), every=12),
    )  # fmt: skip
    x = u.start(0.6, np.ones(1))
    stepper = MovingAsymptotes(problem.low, problem.high, move=0.2)
    out = run(problem, stepper, State(x=x, whole=x), iterations=50, stopping=Stopping())
    fields = u.forward(out.state.whole)
    physics.update(fields)
    value = trapped.value(physics)[0]
    return ComplianceResponse().value(physics)[0], fields.rho, value


def test_a_cavity_is_designed_away():
    # Of a stiff beam's one cavity (52 voxels when this was written) nothing is left, and the beam
    # is no softer: it was 5 % stiffer, for the cavity was a poorer local optimum.
    shut, density, value = beam(None)
    assert enclosed(density) > 30
    assert value > 10
    opened, density, value = beam(3.0)
    assert enclosed(density) == 0
    assert value <= 3.01
    assert opened < 1.02 * shut


def test_bad_input(unknowns):
    p = part((4, 4, 4))
    u = unknowns((4, 4, 4), [1.0, 100.0], [0.3, 0.3], void=False)
    with pytest.raises(InputError, match="allows no empty voxels"):
        trapped_response(TrappedSupport(), p, u)
    u = unknowns((4, 4, 4), [100.0], [0.3])
    everything = Box(name="all", low=(-9, -9, -9), high=(99, 99, 99))
    with pytest.raises(InputError, match="closes the whole surface"):
        trapped_response(TrappedSupport(closed=everything), p, u)
    with pytest.raises(InputError, match="exponent"):
        TrappedSupport(exponent=0.5)

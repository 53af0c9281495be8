"""Contact pressure of designs: gradients between changes of contact, the solver's own answer."""

import numpy as np
import pytest
from design_gradients import smallest_error
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.fea.contact import contact
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.indenter import FlatPunch, SphereIndenter
from voxelmat.model.loadcase import BodyForce, LoadCase, Support
from voxelmat.model.material import Constant, Material
from voxelmat.model.measure_physics import ContactPeak
from voxelmat.model.part import Part
from voxelmat.model.region import FaceRegion
from voxelmat.topopt.physics import Physics
from voxelmat.topopt.response_contact import contact_response

SHAPE, SPACING = (5, 4, 3), (1.0, 0.9, 1.2)
RESINS = (([1.0, 2000.0], [0.49, 0.35]), ([1.0, 50.0, 2000.0], [0.49, 0.4, 0.35]))
TOP = 3 * 1.2
INDENTERS = {
    "ball": SphereIndenter(name="ball", position=(2.4, 1.7, TOP), push="z-", radius=4.0),
    "plane": FlatPunch(name="plane", position=(0.0, 0.0, TOP), push="z-"),
    "punch": FlatPunch(name="punch", position=(2.0, 1.8, TOP), push="z-", size=(2.2, 2.0)),
}
CASE = LoadCase(name="held", supports=(Support(region=FaceRegion(name="floor", side="z-")),))


def resin(n, E, nu):
    return Material(
        name=f"resin{n}", kind="rigid", E=Constant(value=E, unit="MPa"), nu=Constant(value=nu),
        density=Constant(value=1.1e-9, unit="tonne/mm3"),
    )  # fmt: skip


def part(E, nu, shape=SHAPE):
    return Part(
        grid=VoxelGrid(shape=shape, spacing=SPACING),
        resins=tuple(resin(n, *c) for n, c in enumerate(zip(E, nu, strict=True))),
        palette=(EMPTY, Blend.pure("resin0")), labels=np.ones(shape, np.uint16),
    )  # fmt: skip


@settings(
    max_examples=12, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(
    seed=st.integers(0, 10**6), resins=st.sampled_from(RESINS),
    indenter=st.sampled_from(sorted(INDENTERS)), by_force=st.booleans(),
)  # fmt: skip
def test_gradient_between_changes_of_contact(unknowns, seed, resins, indenter, by_force):
    # I3: V over the step, minimum < 1e-6. A step over which a node comes or goes crosses a kink;
    # the smallest steps do not.
    u = unknowns(SHAPE[::-1], *resins, void=False, spacing=SPACING)
    aim = {"force_N": 10.0} if by_force else {"depth_mm": 0.15}
    measure = ContactPeak(indenter=INDENTERS[indenter], load_case=CASE, **aim)
    r = contact_response(measure, part(*resins), u)
    physics = Physics((), SPACING, tolerance=1e-12)
    error, value, _ = smallest_error(u, r, physics, seed=seed, steps=(1e-3, 1e-4, 3e-5))
    assert value > 0
    assert error < 1e-6


def test_force_on_a_single_node_leaves_the_peak_alone(unknowns):
    # One node carries all of the force: its pressure is force over area, whatever the design.
    u = unknowns(SHAPE[::-1], *RESINS[0], void=False, spacing=SPACING)
    measure = ContactPeak(indenter=INDENTERS["ball"], load_case=CASE, force_N=0.1)
    r = contact_response(measure, part(*RESINS[0]), u)
    physics = Physics((), SPACING, tolerance=1e-10)
    physics.update(u.forward(np.random.default_rng(0).uniform(0.25, 0.75, u.n)))
    value, slopes = r.value(physics)
    assert r.found(physics)[1].active.sum() == 1
    slope = u.transpose(physics.fields, slopes)
    assert np.abs(slope).sum() < 1e-6 * value


def test_uniform_design_has_the_answer_of_the_contact_solver(unknowns):
    E, nu = [10.0, 2000.0], [0.4, 0.35]
    p = part(E, nu)
    u = unknowns(SHAPE[::-1], E, nu, void=False, spacing=SPACING)
    physics = Physics((), SPACING, tolerance=1e-9)
    physics.update(u.forward(np.zeros(u.n)))
    for aim in ({"depth_mm": 0.2}, {"force_N": 3.0}):
        solved = contact(p, CASE, INDENTERS["ball"], tol=1e-10, **aim)
        measure = ContactPeak(indenter=INDENTERS["ball"], load_case=CASE, **aim)
        r = contact_response(measure, p, u, key=str(aim))
        peak = solved.peak_pressure.value
        # The solver meets a force to 1e-5 of it.
        assert r.value(physics)[0] == pytest.approx(peak, rel=2e-5)
        assert r.truth(physics) == pytest.approx(peak, rel=2e-5)


def test_it_starts_from_the_contact_of_the_design_before(unknowns):
    E, nu = [10.0, 2000.0], [0.4, 0.35]
    u = unknowns(SHAPE[::-1], E, nu, void=False, spacing=SPACING)
    measure = ContactPeak(indenter=INDENTERS["ball"], load_case=CASE, depth_mm=0.2)
    r = contact_response(measure, part(E, nu), u)
    physics = Physics((), SPACING, tolerance=1e-9)
    x = np.full(u.n, 0.5)
    physics.update(u.forward(x))
    first = r.value(physics)
    again = physics.cg_iterations
    physics.update(u.forward(x))
    second = r.value(physics)
    assert physics.cg_iterations < again
    assert len(r.found(physics)[1].changes) == 1
    assert second[0] == pytest.approx(first[0], rel=1e-7)


def test_bad_input(unknowns):
    E, nu = [10.0, 2000.0], [0.4, 0.35]
    u = unknowns(SHAPE[::-1], E, nu, void=False, spacing=SPACING)
    ball = INDENTERS["ball"]
    for aim in ({}, {"depth_mm": 0.1, "force_N": 1.0}):
        with pytest.raises(InputError, match="one of the two"):
            ContactPeak(indenter=ball, load_case=CASE, **aim)
    with pytest.raises(InputError, match="above 0"):
        ContactPeak(indenter=ball, load_case=CASE, depth_mm=-1.0)
    heavy = LoadCase(
        name="heavy", supports=CASE.supports, loads=(BodyForce(acceleration=(0, 0, -9810.0)),)
    )
    with pytest.raises(InputError, match="change with the design"):
        contact_response(ContactPeak(indenter=ball, load_case=heavy, depth_mm=0.1), part(E, nu), u)
    away = SphereIndenter(name="away", position=(90, 90, TOP), push="z-", radius=1.0)
    with pytest.raises(InputError, match="passes by"):
        contact_response(ContactPeak(indenter=away, load_case=CASE, depth_mm=0.1), part(E, nu), u)
    hollow = unknowns(SHAPE[::-1], E, nu, spacing=SPACING)
    with pytest.raises(InputError, match="may become empty"):
        contact_response(
            ContactPeak(indenter=ball, load_case=CASE, depth_mm=0.1), part(E, nu), hollow
        )

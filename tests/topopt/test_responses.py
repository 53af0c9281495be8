"""Gradients of every response by every kind of unknown; responses with known values."""

import numpy as np
import pytest

from voxelmat.topopt.physics import Case, Physics
from voxelmat.topopt.responses import Amount, ComplianceResponse, TargetResponse

SHAPE, SPACING = (2, 3, 4), (1.0, 0.9, 1.2)
STEPS = tuple(10.0 ** np.arange(-2, -6.1, -0.5))
RESINS = {
    "one": ([100.0], [0.3]),
    "two": ([1.0, 2000.0], [0.49, 0.35]),
    "three": ([1.0, 50.0, 2000.0], [0.49, 0.4, 0.35]),
}


def target_on_top(case=0):
    nodes = np.zeros(tuple(n + 1 for n in SHAPE), bool)
    nodes[-1] = True
    rng = np.random.default_rng(4)
    return TargetResponse(
        case=case, nodes=nodes, target=np.where(nodes, rng.uniform(-0.3, -0.1, nodes.shape), 0.0),
        direction=(0.6, 0.0, 0.8),
    )  # fmt: skip


RESPONSES = {
    "compliance": lambda k: ComplianceResponse(),
    "target": lambda k: target_on_top(),
    "target of the second case": lambda k: target_on_top(1),
    "amount": lambda k: Amount(
        name="mass", unit="tonne", weight=np.random.default_rng(1).random(SHAPE),
        factor=1.0 + np.arange(k),
    ),
}  # fmt: skip


@pytest.mark.parametrize("response", RESPONSES)
@pytest.mark.parametrize(
    ("resins", "void"), [("one", True), ("two", True), ("three", True), ("two", False)]
)
def test_gradient_is_a_v_over_the_step(unknowns, cantilever, dense_system, resins, void, response):
    # I3: the error of a central difference falls with the step and rises again; minimum < 1e-6.
    u = unknowns(SHAPE, *RESINS[resins], void=void, spacing=SPACING)
    u.sharpness = 2.0
    r = RESPONSES[response](u.resins)
    physics = Physics(cantilever(SHAPE, second=True), SPACING, system=dense_system)
    check_gradient(u, r, physics)


def test_gradient_through_the_real_solver(unknowns, cantilever):
    # I3 asks for a solver tolerance of 1e-9 or better.
    shape = (2, 2, 3)
    u = unknowns(shape, *RESINS["two"], spacing=SPACING)
    physics = Physics(cantilever(shape, second=True), SPACING, tolerance=1e-10)
    check_gradient(u, ComplianceResponse(), physics, steps=(1e-3, 1e-4, 1e-5))


def check_gradient(u, r, physics, steps=STEPS):
    rng = np.random.default_rng(2)
    x, direction = rng.uniform(0.3, 0.7, u.n), rng.uniform(-1, 1, u.n)

    def value(y):
        physics.update(u.forward(y))
        return r.value(physics)

    _, slopes = value(x)
    slope = float(u.transpose(physics.fields, slopes) @ direction)
    errors = []
    for step in steps:
        d = (value(x + step * direction)[0] - value(x - step * direction)[0]) / (2 * step)
        errors.append(abs(d - slope) / abs(slope))
    assert min(errors) < 1e-6
    assert errors[0] > min(errors) or errors[0] < 1e-12  # exact where the response is linear


def test_winkler_pad_by_its_column_formula():
    # J1: Winkler foundation of two layers in series, k = p / d; t 4 and 6 mm, E 1 and 10 MPa,
    # laterally confined, nu 0.3: 0.292642 N/mm^3.
    E, nu = np.array([1.0, 10.0]), np.array([0.3, 0.3])
    lam, mu = E * nu / (1 + nu) / (1 - 2 * nu), E / 2 / (1 + nu)
    nz, ny, nx = 10, 3, 3
    layer = np.repeat([0, 1], [4, 6])[:, None, None] * np.ones((nz, ny, nx), int)
    fixed = np.zeros((3, nz + 1, ny + 1, nx + 1), bool)
    fixed[2, 0] = True
    fixed[0, :, :, [0, -1]] = True
    fixed[1, :, [0, -1]] = True
    force = np.zeros(fixed.shape)
    for b in (0, 1):
        for a in (0, 1):
            force[2, nz, b : ny + b, a : nx + a] -= 1 / 4
    physics = Physics(
        (Case(name="p", weight=1.0, force=force, fixed=fixed),), (1, 1, 1), tolerance=1e-12
    )

    class Layers:
        lam = None
        mu = None

    Layers.lam, Layers.mu = lam[layer], mu[layer]
    physics.update(Layers)
    top = physics.displacement(0)[2, nz]
    np.testing.assert_allclose(-1 / top, 0.292642, rtol=2e-6)
    nodes = np.zeros(fixed.shape[1:], bool)
    nodes[nz] = True
    aim = TargetResponse(
        case=0, nodes=nodes, target=np.where(nodes, -1 / 0.292642, 0.0), direction=(0, 0, 1)
    )
    assert aim.report(aim.value(physics)[0]) < 2e-6


def test_cases_with_the_same_supports_share_a_system_and_springs_do_not(cantilever):
    made = []

    class Counting:
        def __init__(self, lam, mu, spacing, fixed, *, springs, element, monitor):
            made.append(springs)

        def solve(self, b, *, x0, tol):
            class Answer:
                u, iterations = b, 1

            return Answer

    one, two = cantilever(SHAPE, second=True)
    sprung = Case(
        name="s", weight=1.0, force=two.force, fixed=one.fixed, springs=np.ones(one.fixed.shape)
    )
    physics = Physics((one, two, sprung), SPACING, system=Counting)

    class Nothing:
        lam = mu = np.ones(SHAPE)

    physics.update(Nothing)
    for case in (0, 1, 2, 1):
        physics.displacement(case)
    assert len(made) == 2
    assert physics.cg_iterations == 3

"""Every response of statics against central differences, for random designs of many resins."""

import numpy as np
import pytest
from design_gradients import smallest_error
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from voxelmat.topopt.physics import Physics
from voxelmat.topopt.response_amount import CentreResponse
from voxelmat.topopt.response_area import AreaResponse, NodeGradient
from voxelmat.topopt.response_interface import InterfaceResponse
from voxelmat.topopt.response_motion import (
    LargestMotionResponse,
    MeanMotionResponse,
    TargetErrorResponse,
    WorstComplianceResponse,
)
from voxelmat.topopt.response_strength import StrengthResponse
from voxelmat.topopt.responses import Amount, ComplianceResponse, TargetResponse, told
from voxelmat.topopt.unknowns import Choice

SHAPE, SPACING = (2, 2, 3), (1.0, 0.9, 1.2)
NODES = tuple(n + 1 for n in SHAPE)


def random_choice(rng, resins, void):
    """Some voxels frozen, kept or cut by the outline."""
    kind = rng.choice(6, SHAPE, p=[0.6, 0.1, 0.1, 0.1, 0.05, 0.05])
    kind.flat[0] = 0
    kept = kind == 4
    return Choice(
        domain=~kept, solid=kind == 1, empty=(kind == 2) & void,
        resin=np.where(kind == 3, rng.integers(0, resins, SHAPE), -1),
        fill=np.where(kept, 0.0, rng.choice([1.0, 0.6], SHAPE)),
        kept_lam=np.where(kept, 70.0, 0.0), kept_mu=np.where(kept, 50.0, 0.0),
    )  # fmt: skip


def every_response(rng, u):
    """One of each kind, with random places, directions and strengths."""
    c, K = u.choice, u.resins
    nodes = rng.random(NODES) < 0.4
    nodes[-1, -1, -1] = True
    direction = rng.normal(size=3)
    direction = tuple(direction / np.linalg.norm(direction))
    target = TargetResponse(
        case=1, nodes=nodes, target=np.where(nodes, rng.uniform(-1, 1, NODES), 0.0),
        direction=direction,
    )  # fmt: skip
    common = {"nodes": nodes, "direction": direction}
    judged = rng.random(SHAPE) < 0.8
    judged.flat[0] = True
    strength = {
        "inverse": rng.uniform(0.1, 1, K), "domain": c.domain, "judged": judged, "exponent": 8.0,
        "kept": np.where(c.domain, 0.0, 0.3), "cases": (0, 1),
    }  # fmt: skip
    found = [
        ComplianceResponse(of=(1,)),
        WorstComplianceResponse(cases=(0, 1), exponent=16.0, key="worst"),
        MeanMotionResponse(case=1, key="mean", **common),
        LargestMotionResponse(case=0, aim=np.zeros(NODES), size=1.0, exponent=8.0, key="largest",
                              **common),
        LargestMotionResponse(case=0, aim=target.target, size=0.7, exponent=16.0, key="error",
                              **common),
        target,
        TargetErrorResponse(square=target),
        StrengthResponse(kind="stress", key="s", name="s", **strength),
        StrengthResponse(kind="stretch", key="t", name="t", **strength),
        CentreResponse(name="c", weight=c.fill * rng.random(SHAPE), place=rng.random((1, 1, 3)),
                       density=rng.uniform(0.5, 1.5, K), kept_mass=0.2, kept_moment=0.7),
        Amount(name="m", unit="", weight=c.fill, factor=rng.uniform(0.5, 1.5, K), always=2.0),
    ]  # fmt: skip
    if u.void is not None:
        found.append(
            AreaResponse(kind="perimeter", gradient=NodeGradient(c.domain, SPACING), step=1.0,
                         name="p")
        )  # fmt: skip
    if K > 1:
        found += [
            AreaResponse(kind="interface", gradient=NodeGradient(c.domain, SPACING), step=1.0,
                         name="i"),
            InterfaceResponse(cases=(0, 1), tensile=rng.uniform(1, 2, (K, K)),
                              shear=rng.uniform(1, 2, (K, K)), domain=c.domain, judged=judged,
                              exponent=8.0, key="b"),
        ]  # fmt: skip
    return found


@settings(
    max_examples=15, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(seed=st.integers(0, 10**6), resins=st.integers(1, 4), void=st.booleans())
def test_gradients_of_random_designs(unknowns, cantilever, dense_system, seed, resins, void):
    # I3: V over the step, minimum < 1e-6.
    rng = np.random.default_rng(seed)
    void = void or resins == 1
    E, nu = 10.0 ** rng.uniform(0, 3.3, resins), rng.uniform(0.2, 0.49, resins)
    u = unknowns(SHAPE, E, nu, void=void, spacing=SPACING, choice=random_choice(rng, resins, void))
    u.sharpness = float(rng.choice([0.0, 2.0]))
    physics = Physics(cantilever(SHAPE, second=True), SPACING, system=dense_system)
    for r in every_response(rng, u):
        steps = 10.0 ** np.arange(-3.0, -6.6, -0.5)
        error, value, slope = smallest_error(u, r, physics, seed=seed, steps=steps)
        # Where nothing or next to nothing depends on the design a relative error means nothing.
        assert error < 1e-6 or abs(slope) < 1e-6 * abs(value), (r.name, error, value, slope)


def test_gradients_through_the_real_solver(unknowns, cantilever):
    # I3 asks for a solver tolerance of 1e-9 or better; moduli are in f64.
    rng = np.random.default_rng(3)
    u = unknowns(SHAPE, [1.0, 2000.0], [0.49, 0.35], spacing=SPACING)
    physics = Physics(cantilever(SHAPE, second=True), SPACING, tolerance=1e-12)
    for r in every_response(rng, u):
        assert smallest_error(u, r, physics, steps=(1e-3, 1e-4, 1e-5))[0] < 1e-6, r.name


def test_smooth_maxima_come_to_the_true_ones(unknowns, cantilever, dense_system):
    rng = np.random.default_rng(5)
    u = unknowns(SHAPE, [1.0, 2000.0], [0.49, 0.35], spacing=SPACING)
    physics = Physics(cantilever(SHAPE, second=True), SPACING, system=dense_system)
    first, last = (u.forward(rng.uniform(0.2, 0.8, u.n)) for _ in range(2))
    corrected = [r for r in every_response(rng, u) if hasattr(r, "truth")]
    assert len(corrected) == 6
    for r in corrected:
        physics.update(first)
        value, _ = r.value(physics)
        assert value == pytest.approx(told(r, physics, value), rel=1e-12)  # exact at the start
        physics.update(last)
        held, slopes = r.value(physics)
        assert held != pytest.approx(told(r, physics, held), rel=1e-6)  # held in between
        physics.renewing = True
        value, again = r.value(physics)
        physics.renewing = False
        assert value == pytest.approx(told(r, physics, value), rel=1e-12)
        for key, slope in slopes.items():
            np.testing.assert_allclose(slope / held, again[key] / value, rtol=1e-9, atol=1e-300)


def test_the_ratio_goes_into_the_warm_state(unknowns, cantilever, dense_system):
    u = unknowns(SHAPE, [100.0], [0.3], spacing=SPACING)
    r = WorstComplianceResponse(cases=(0, 1), exponent=4.0, key="w")
    rng = np.random.default_rng(6)
    designs = [u.forward(rng.uniform(0.2, 0.8, u.n)) for _ in range(4)]
    straight = Physics(cantilever(SHAPE, second=True), SPACING, system=dense_system)
    values = []
    for n, d in enumerate(designs):
        straight.renewing = n == 1
        straight.update(d)
        values.append(r.value(straight)[0])
        if n == 1:
            kept = straight.warm_state()
    resumed = Physics(cantilever(SHAPE, second=True), SPACING, system=dense_system)
    resumed.restore(kept)
    for d, value in zip(designs[2:], values[2:], strict=True):
        resumed.update(d)
        assert r.value(resumed)[0] == value

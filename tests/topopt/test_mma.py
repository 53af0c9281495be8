"""Moving asymptotes, its subproblem, optimality criteria and the linearised gap."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import linprog, minimize

from voxelmat.errors import ConvergenceError, InputError
from voxelmat.kernels.mma import dual_terms
from voxelmat.topopt.criteria import OptimalityCriteria, linearised_gap
from voxelmat.topopt.mma import MovingAsymptotes
from voxelmat.topopt.subproblem import Separable, solve_dual


def beam(x):
    c = np.array([61.0, 37.0, 19.0, 7.0, 1.0])
    F = np.array([0.0624 * x.sum(), (c / x**3).sum() - 1.0])
    return F, np.stack([np.full(5, 0.0624), -3 * c / x**4])


def run_beam(steps, optimiser=None):
    optimiser = optimiser or MovingAsymptotes(np.full(5, 1.0), np.full(5, 10.0))
    x = np.full(5, 5.0)
    for _ in range(steps):
        F, dF = beam(x)
        x = optimiser.step(x, F * [10 / 1.56, 1.0], dF * np.array([[10 / 1.56], [1.0]]))
    return x


def test_five_segment_beam():
    # I4: Svanberg 1987, Int. J. Numer. Meth. Eng. 24:359-373, five-segment cantilever.
    x = run_beam(60)
    F, _ = beam(x)
    assert F[0] == pytest.approx(1.33995636, abs=1e-7)
    assert F[1] < 1e-7
    np.testing.assert_allclose(x, [6.01602, 5.30917, 4.49433, 3.50147, 2.15267], atol=2e-4)


def test_state_resumes_to_the_same_bits():
    whole = MovingAsymptotes(np.full(5, 1.0), np.full(5, 10.0))
    x = np.full(5, 5.0)
    for k in range(12):
        if k == 7:
            kept, x_kept = whole.state(), x.copy()
        x = whole.step(x, *beam(x))
    other = MovingAsymptotes(np.full(5, 1.0), np.full(5, 10.0))
    other.restore(kept)
    y = x_kept
    for _ in range(5):
        y = other.step(y, *beam(y))
    np.testing.assert_array_equal(x, y)


def random_model(seed, n, m, feasible=False):
    """A model about x; `feasible` makes x itself satisfy every constraint."""
    rng = np.random.default_rng(seed)
    x = rng.uniform(0.2, 0.8, n)
    p, q = rng.uniform(0.01, 1, (1 + m, n)), rng.uniform(0.01, 1, (1 + m, n))
    lower, upper = x - 0.3, x + 0.3
    model = Separable(
        p=p, q=q, r=np.zeros(1 + m), lower=lower, upper=upper,
        low=np.maximum(0, x - 0.2), high=np.minimum(1, x + 0.2),
    )  # fmt: skip
    r = -model.values(x) * rng.uniform(1.0 if feasible else 0.9, 1.1, 1 + m)
    return Separable(**{f: getattr(model, f) for f in ("p", "q", "lower", "upper", "low", "high")},
                     r=r), x  # fmt: skip


@settings(max_examples=15, deadline=None)
@given(st.integers(0, 10**6), st.integers(1, 12), st.integers(1, 3))
def test_subproblem_meets_its_optimality_conditions(seed, n, m):
    model, _ = random_model(seed, n, m)
    x, lam = solve_dual(model, 1e4)
    F = model.values(x)
    assert np.all(lam >= 0)
    assert np.all((x >= model.low) & (x <= model.high))
    elastic = np.maximum(0, lam - 1e4)
    # The barrier of 1e-9 rounds the kink at the ceiling by its root where nothing is feasible.
    slack = np.where(lam > 0.99e4, 4e-5, 1e-6)
    assert np.all(F[1:] - elastic < slack)
    # Complementarity, on the scale of the multiplier, which reaches 1e4 where nothing is feasible.
    assert np.all(np.abs(lam * (F[1:] - elastic)) / (1 + lam) < slack)
    weights = np.concatenate([[1.0], lam])
    slope = weights @ (model.p / (model.upper - x) ** 2 - model.q / (x - model.lower) ** 2)
    inside = (x > model.low + 1e-9) & (x < model.high - 1e-9)
    assert np.all(np.abs(slope[inside]) < 1e-6 * (1 + np.abs(weights).sum()) * 100)
    assert np.all(slope[x <= model.low] >= -1e-6)
    assert np.all(slope[x >= model.high] <= 1e-6)


def test_subproblem_equals_a_general_solver():
    model, x0 = random_model(5, 6, 2, feasible=True)
    x, _ = solve_dual(model, 1e6)
    other = minimize(
        lambda y: model.values(y)[0], x0, method="SLSQP",
        bounds=list(zip(model.low, model.high, strict=True)),
        constraints={"type": "ineq", "fun": lambda y: -model.values(y)[1:]},
        options={"ftol": 1e-12, "maxiter": 500},
    )  # fmt: skip
    assert other.success
    np.testing.assert_allclose(model.values(x)[0], other.fun, rtol=1e-7)


def slow_dual(lam, p, q, lower, upper, low, high):
    pl, ql = p[0] + lam @ p[1:], q[0] + lam @ q[1:]
    raw = (lower * np.sqrt(pl) + upper * np.sqrt(ql)) / (np.sqrt(pl) + np.sqrt(ql))
    x = np.clip(raw, low, high)
    du, dl = 1 / (upper - x), 1 / (x - lower)
    slope = (p[1:] * du**2 - q[1:] * dl**2) * ((raw > low) & (raw < high))
    return x, p[1:] @ du + q[1:] @ dl, (slope / (2 * pl * du**3 + 2 * ql * dl**3)) @ slope.T


def test_dual_kernel_equals_its_slow_twin():
    model, _ = random_model(11, 37, 3)
    lam = np.array([0.3, 2.0, 0.01])
    x, value, curvature = np.empty(37), np.empty((8, 3)), np.empty((8, 3, 3))
    args = (model.p, model.q, model.lower, model.upper, model.low, model.high)
    dual_terms(lam, *args, x, value, curvature)
    want_x, want_value, want_curvature = slow_dual(lam, *args)
    np.testing.assert_allclose(x, want_x, rtol=1e-13)
    np.testing.assert_allclose(value.sum(0), want_value, rtol=1e-12)
    np.testing.assert_allclose(curvature.sum(0), want_curvature, rtol=1e-11)


def test_without_constraints_it_descends_to_the_minimum():
    optimiser = MovingAsymptotes(np.zeros(4), np.ones(4))
    goal, x = np.array([0.1, 0.5, 0.9, 1.4]), np.full(4, 0.5)
    for _ in range(60):
        x = optimiser.step(x, np.array([10 * ((x - goal) ** 2).sum()]), 20 * (x - goal)[None])
    np.testing.assert_allclose(x, [0.1, 0.5, 0.9, 1.0], atol=2e-4)


def test_a_constraint_that_cannot_be_met_ends_at_least_violation():
    optimiser = MovingAsymptotes(np.zeros(3), np.ones(3))
    x = np.full(3, 0.5)
    for _ in range(40):
        x = optimiser.step(x, np.array([x.sum(), 2 - x[0]]), np.array([[1.0, 1, 1], [-1, 0, 0]]))
    np.testing.assert_allclose(x, [1, 0, 0], atol=1e-3)


def test_values_that_are_not_finite_are_refused():
    optimiser = MovingAsymptotes(np.zeros(2), np.ones(2))
    with pytest.raises(ConvergenceError, match="not finite"):
        optimiser.step(np.full(2, 0.5), np.array([1.0, np.nan]), np.ones((2, 2)))


def test_optimality_criteria_on_a_problem_with_a_known_answer():
    # min sum c/x subject to sum x <= n/2: x proportional to sqrt(c), by Lagrange.
    c = np.array([1.0, 4.0, 9.0, 16.0])
    optimiser, x = OptimalityCriteria(np.full(4, 1e-3), np.ones(4)), np.full(4, 0.5)
    for _ in range(40):
        F = np.array([(c / x).sum(), x.sum() / 2 - 1])
        x = optimiser.step(x, F, np.stack([-c / x**2, np.full(4, 0.5)]))
    np.testing.assert_allclose(x, np.sqrt(c) / np.sqrt(c).sum() * 2, rtol=1e-9)
    with pytest.raises(InputError, match="exactly one"):
        optimiser.step(x, np.zeros(3), np.zeros((3, 4)))


@settings(max_examples=15, deadline=None)
@given(st.integers(0, 10**6), st.integers(0, 1))
def test_gap_equals_the_linear_programme_or_bounds_it(seed, m):
    rng = np.random.default_rng(seed)
    n = 6
    x, g = rng.uniform(0.1, 0.9, n), rng.standard_normal((1 + m, n))
    F = np.concatenate([[1.0], -rng.uniform(0, 0.3, m)])
    gap = linearised_gap(x, np.zeros(n), np.ones(n), F, g, np.ones(m))
    rows = {"A_ub": g[1:], "b_ub": g[1:] @ x - F[1:]} if m else {}
    best = linprog(g[0], bounds=[(0, 1)] * n, **rows)
    assert gap >= g[0] @ x - best.fun - 1e-9
    if m == 0:
        assert gap == pytest.approx(g[0] @ x - best.fun, abs=1e-9)

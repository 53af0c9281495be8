"""The convex separable subproblem of moving asymptotes, solved through its small dual."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import ConvergenceError
from voxelmat.kernels.mma import dual_terms
from voxelmat.monitor import computing

__all__ = ["Separable", "solve_dual"]

Array = NDArray[np.float64]

_BLOCKS = 8  # partial sums, added in order: the same bits on any number of threads
_BARRIER_END = 1e-9
_NEWTON_STEPS = 60
_HALVINGS = 20


@dataclass(frozen=True, slots=True, kw_only=True)
class Separable:
    """f_i(x) = r_i + sum_j p_ij / (upper_j - x_j) + q_ij / (x_j - lower_j), low <= x <= high.

    Attributes
    ----------
    p, q : ndarray, (1 + m, n)
        Non-negative; row 0 is the objective.
    r : ndarray, (1 + m,)
    lower, upper, low, high : ndarray, (n,)
        Asymptotes, and the bounds of this step strictly between them.
    """

    p: Array
    q: Array
    r: Array
    lower: Array
    upper: Array
    low: Array
    high: Array

    def values(self, x: Array) -> Array:
        """Objective and constraints at x, (1 + m,)."""
        total: Array = self.r + (self.p / (self.upper - x) + self.q / (x - self.lower)).sum(1)
        return total


class _Dual:
    """Constraint values and curvature as functions of the multipliers."""

    def __init__(self, model: Separable, ceiling: float) -> None:
        self._model, self._ceiling = model, ceiling
        self.m = model.p.shape[0] - 1
        self.x = np.empty(model.p.shape[1])
        self._value = np.empty((_BLOCKS, self.m))
        self._curvature = np.empty((_BLOCKS, self.m, self.m))

    def __call__(self, multipliers: Array) -> tuple[Array, Array]:
        s = self._model
        with computing():
            dual_terms(
                multipliers, s.p, s.q, s.lower, s.upper, s.low, s.high, self.x,
                self._value, self._curvature,
            )  # fmt: skip
        # The elastic variable y of each constraint costs ceiling * y + y^2 / 2, so beyond the
        # ceiling a multiplier buys violation instead of growing without end.
        elastic = np.maximum(0.0, multipliers - self._ceiling)
        value = s.r[1:] + self._value.sum(0) - elastic
        curvature = self._curvature.sum(0) + np.diag((multipliers > self._ceiling).astype(float))
        return value, curvature


def solve_dual(model: Separable, ceiling: float, start: Array | None = None) -> tuple[Array, Array]:
    """Minimise the objective of `model` subject to its constraints <= 0.

    Newton's method on (multipliers, slacks) along a barrier that falls to 1e-9; x follows from
    the multipliers in closed form, so only m x m systems are solved.

    Parameters
    ----------
    model : Separable
    ceiling : float
        Price of violation once no feasible point exists.
    start : ndarray, (m,), optional
        Multipliers of a similar problem.

    Returns
    -------
    x : ndarray, (n,)
    multipliers : ndarray, (m,)

    Raises
    ------
    ConvergenceError
        If the values are not finite.
    """
    dual = _Dual(model, ceiling)
    if dual.m == 0:
        dual(np.empty(0))
        return dual.x, np.empty(0)
    lam = np.ones(dual.m) if start is None else np.clip(start, 1e-3, ceiling)
    barrier = 0.1
    value, curvature = dual(lam)
    if not np.all(np.isfinite(value)):
        raise ConvergenceError(
            "The subproblem of the optimiser has values that are not finite; the response or "
            "its gradient overflowed."
        )
    slack = np.maximum(barrier / lam, -value)
    while True:
        lam, slack, value, curvature = _centre(dual, lam, slack, value, curvature, barrier)
        if barrier <= _BARRIER_END:
            break
        barrier = max(0.1 * barrier, _BARRIER_END)
    dual(lam)
    return dual.x, lam


def _centre(
    dual: _Dual, lam: Array, slack: Array, value: Array, curvature: Array, barrier: float
) -> tuple[Array, Array, Array, Array]:
    """Newton steps until constraint + slack = 0 and multiplier * slack = barrier."""
    for _ in range(_NEWTON_STEPS):
        size = max(float(np.abs(value + slack).max()), float(np.abs(lam * slack - barrier).max()))
        if size < 0.5 * barrier:
            break
        system = curvature + np.diag(slack / lam)
        d_lam = np.linalg.solve(system, value + barrier / lam)
        d_slack = barrier / lam - slack - slack * d_lam / lam
        longest = max(
            1.0,
            float((-d_lam / lam).max()) / 0.95,
            float((-d_slack / slack).max()) / 0.95,
            float((d_lam / lam).max()) / 20.0,
        )
        length = 1.0 / longest
        for _ in range(_HALVINGS):
            new_lam, new_slack = lam + length * d_lam, slack + length * d_slack
            value, curvature = dual(new_lam)
            new_size = max(
                float(np.abs(value + new_slack).max()),
                float(np.abs(new_lam * new_slack - barrier).max()),
            )
            if new_size < size * (1 - 1e-3 * length):
                break
            length *= 0.5
        lam, slack = new_lam, new_slack
    return lam, slack, value, curvature

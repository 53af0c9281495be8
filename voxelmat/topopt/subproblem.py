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
_BARRIER_START, _BARRIER_END = 0.1, 1e-9
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
        value: Array = s.r[1:] + self._value.sum(0)
        curvature: Array = self._curvature.sum(0)
        return value, curvature

    def gradient(self, multipliers: Array, barrier: float) -> tuple[Array, Array]:
        """Of the concave dual plus ``barrier * sum log multipliers``; and minus its Hessian.

        The elastic variable y of each constraint costs ceiling * y + y^2 / 2, so beyond the
        ceiling a multiplier buys violation instead of growing without end; the barrier on y
        rounds the kink.
        """
        value, curvature = self(multipliers)
        over = multipliers - self._ceiling
        root = np.sqrt(over**2 + 4.0 * barrier)
        y = np.where(over > 0, 0.5 * (over + root), 2.0 * barrier / (root - np.minimum(over, 0.0)))
        slope = value - y + barrier / multipliers
        bend = curvature + np.diag(y / root + barrier / multipliers**2)
        return slope, bend


def solve_dual(model: Separable, ceiling: float, start: Array | None = None) -> tuple[Array, Array]:
    """Minimise the objective of `model` subject to its constraints <= 0.

    Newton's method on the multipliers along a barrier that falls to 1e-9; x follows from them in
    closed form, so only m x m systems are solved.

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
    if not np.all(np.isfinite(dual(lam)[0])):
        raise ConvergenceError(
            "The subproblem of the optimiser has values that are not finite; the response or "
            "its gradient overflowed."
        )
    barrier = _BARRIER_START
    while True:
        lam = _climb(dual, lam, barrier)
        if barrier <= _BARRIER_END:
            break
        barrier = max(0.1 * barrier, _BARRIER_END)
    dual(lam)
    return dual.x, lam


def _climb(dual: _Dual, lam: Array, barrier: float) -> Array:
    """Newton's method to the top of the concave dual with its barrier."""
    slope, bend = dual.gradient(lam, barrier)
    for _ in range(_NEWTON_STEPS):
        if float(np.abs(slope).max()) < 0.5 * barrier:
            break
        # With fewer free unknowns than active constraints the curvature alone is singular.
        bend += 1e-13 * float(bend.diagonal().max()) * np.eye(dual.m)
        step = np.linalg.solve(bend, slope)
        length = 1.0 / max(1.0, float((-step / lam).max()) / 0.95, float((step / lam).max()) / 20.0)
        rise = float(slope @ step)
        for _ in range(_HALVINGS):
            new = lam + length * step
            slope, bend = dual.gradient(new, barrier)
            # Along the step the slope only falls; far below zero means far beyond the top.
            if float(slope @ step) > -0.5 * rise:
                break
            length *= 0.5
        lam = new
    return lam

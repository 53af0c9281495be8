"""The convex separable subproblem of moving asymptotes, solved through its small dual."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import ConvergenceError
from voxelmat.kernels.mma import dual_terms, model_values
from voxelmat.monitor import computing

__all__ = ["BLOCKS", "Dual", "Separable", "climb_dual", "solve_dual"]

Array = NDArray[np.float64]

BLOCKS = 8  # partial sums, added in order: the same bits on any number of threads
_BARRIER_START, _BARRIER_END = 0.1, 1e-9
_NEWTON_STEPS = 60
_HALVINGS = 20
_WARM_STEPS = 10  # of the plain Newton method from the multipliers of the step before
_WARM_END = 1e-9
_SMALLEST = 1e-6  # a multiplier that falls below this is zero


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
        value = np.empty((BLOCKS, self.r.size))
        with computing():
            model_values(x, self.p, self.q, self.lower, self.upper, value)
        total: Array = self.r + value.sum(0)
        return total


class Dual(Protocol):
    """A concave dual: constraint values at the minimiser x of the Lagrangian, and curvature."""

    m: int
    x: Array

    def __call__(self, multipliers: Array) -> tuple[Array, Array]:
        """Values (m,) and the matrix (m, m) by which they fall; leaves the minimiser in `x`."""


class _SeparableDual:
    """The dual of a `Separable`."""

    def __init__(self, model: Separable) -> None:
        self._model = model
        self.m = model.p.shape[0] - 1
        self.x = np.empty(model.p.shape[1])
        self._value = np.empty((BLOCKS, self.m))
        self._curvature = np.empty((BLOCKS, self.m, self.m))

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


def solve_dual(model: Separable, ceiling: float, start: Array | None = None) -> tuple[Array, Array]:
    """Minimise the objective of `model` subject to its constraints <= 0.

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
    dual = _SeparableDual(model)
    multipliers = climb_dual(dual, ceiling, start)
    return dual.x, multipliers


def climb_dual(dual: Dual, ceiling: float, start: Array | None = None) -> Array:
    """Multipliers at the top of a concave dual; its minimiser is then in ``dual.x``.

    With the multipliers of a similar problem, Newton's method on those that are not zero takes
    a handful of evaluations. Without, or should it not settle, Newton's method climbs along a
    barrier that falls to 1e-9. Only m x m systems are solved.

    Raises
    ------
    ConvergenceError
        If the values are not finite.
    """
    if dual.m == 0:
        dual(np.empty(0))
        return np.empty(0)
    lam = np.ones(dual.m) if start is None else np.clip(start, 0.0, ceiling)
    if not np.all(np.isfinite(dual(lam)[0])):
        raise ConvergenceError(
            "The subproblem of the optimiser has values that are not finite; the response or "
            "its gradient overflowed."
        )
    if start is not None and (warm := _from_near(dual, lam, ceiling)) is not None:
        return warm
    lam = np.maximum(lam, 1e-3)
    barrier = _BARRIER_START
    while True:
        lam = _climb(dual, lam, ceiling, barrier)
        if barrier <= _BARRIER_END:
            break
        barrier = max(0.1 * barrier, _BARRIER_END)
    dual(lam)
    return lam


def _from_near(dual: Dual, lam: Array, ceiling: float) -> Array | None:
    """Newton's method on the multipliers that are not zero; None if it does not settle."""
    for _ in range(_WARM_STEPS):
        slope, bend = dual(lam)
        slope = slope - np.maximum(lam - ceiling, 0.0)
        lam = np.where((lam <= _SMALLEST) & (slope <= 0.0), 0.0, lam)
        free = (lam > 0.0) | (slope > 0.0)
        if not free.any() or float(np.abs(slope[free]).max()) < _WARM_END:
            return lam
        bend = bend + np.diag((lam > ceiling).astype(np.float64))
        bend += (1e-13 * float(bend.diagonal().max()) + 1e-300) * np.eye(dual.m)
        step = np.linalg.solve(bend[np.ix_(free, free)], slope[free])
        lam = lam.copy()
        at = np.maximum(lam[free], _SMALLEST)
        # On a logarithmic scale constraints are nearly straight and multipliers stay positive.
        moved = at * np.exp(np.clip(step / at, -5.0, 3.0))
        lam[free] = np.where((at == _SMALLEST) & (step < 0.0), 0.0, moved)
    return None


def _barred(dual: Dual, lam: Array, ceiling: float, barrier: float) -> tuple[Array, Array]:
    """Gradient of the dual plus ``barrier * sum log multipliers``; and minus its Hessian.

    The elastic variable y of each constraint costs ceiling * y + y^2 / 2, so beyond the
    ceiling a multiplier buys violation instead of growing without end; the barrier on y
    rounds the kink.
    """
    value, curvature = dual(lam)
    over = lam - ceiling
    root = np.sqrt(over**2 + 4.0 * barrier)
    y = np.where(over > 0, 0.5 * (over + root), 2.0 * barrier / (root - np.minimum(over, 0.0)))
    slope = value - y + barrier / lam
    bend = curvature + np.diag(y / root + barrier / lam**2)
    return slope, bend


def _climb(dual: Dual, lam: Array, ceiling: float, barrier: float) -> Array:
    """Newton's method to the top of the concave dual with its barrier."""
    slope, bend = _barred(dual, lam, ceiling, barrier)
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
            slope, bend = _barred(dual, new, ceiling, barrier)
            # Along the step the slope only falls; far below zero means far beyond the top.
            if float(slope @ step) > -0.5 * rise:
                break
            length *= 0.5
        lam = new
    return lam

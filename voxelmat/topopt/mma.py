"""The method of moving asymptotes, with conservatism that adapts without inner solves."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from voxelmat.topopt.subproblem import Separable, solve_dual

__all__ = ["MovingAsymptotes"]

Array = NDArray[np.float64]

_FIRST = 0.5  # asymptotes of the first two steps, of the range
_WIDEN, _NARROW = 1.2, 0.7
# The usual 10 lets the model of an unknown that drifts become a straight line; designs then jump
# .1 to .3 % away from the optimum of the variable-thickness sheet every few iterations.
_FARTHEST = 1.0
_INSIDE = 0.9  # of the way to an asymptote
# Least convexity added to a model, of the mean slope. It must follow the slope: a fixed number
# outweighs slopes of 1 / n on fine grids, and with none the designs of a variable-thickness sheet
# keep swinging (1e-3: .2 % above the optimum after 40 iterations; 1e-2: .005 %).
_LEAST_CONSERVATISM = 1e-2
_TINY = 1e-14


class MovingAsymptotes:
    """min f0(x) subject to f_i(x) <= 0 and low <= x <= high, one gradient a step.

    Scale f0 to about 10 and the f_i to about 1. The asymptotes come no closer than `floor` of
    the range: at the usual 0.01 target-deflection designs stall in a two-cycle at some per
    cent.

    With `adaptive`, a model that the true value exceeded is made more convex, and otherwise
    relaxed by half: the globally convergent variant, its inner loop spread over the outer
    steps. Target deflections need it; compliance, whose models are good, is faster without.

    Parameters
    ----------
    low, high : ndarray, (n,)
        Bounds, ``low < high``.
    move : float
        Longest step, of the range.
    floor : float
        Smallest distance of an asymptote, of the range.
    ceiling : float
        Price of violating a constraint by 1, once the subproblem has no feasible point.
    adaptive : bool

    References
    ----------
    Svanberg, K., The method of moving asymptotes, Int. J. Numer. Meth. Eng. 24 (1987) 359-373;
    Svanberg, K., A class of globally convergent optimization methods based on conservative
    convex separable approximations, SIAM J. Optim. 12 (2002) 555-573.
    """

    def __init__(
        self,
        low: Array,
        high: Array,
        *,
        move: float = 0.5,
        floor: float = 1e-3,
        ceiling: float = 1e3,
        adaptive: bool = True,
    ) -> None:
        self._low, self._high = low, high
        self._range = high - low
        self._move, self._floor, self._ceiling = move, floor, ceiling
        self._adaptive = adaptive
        self._steps = 0
        self._last = self._before = np.empty(0)
        self._lower = self._upper = np.empty(0)
        self._conservatism = np.empty(0)
        self._predicted = np.empty(0)
        self._steepness = np.empty(0)
        self._distance = 1.0
        self.multipliers = np.empty(0)

    def step(self, x: Array, F: Array, dF: Array) -> Array:
        """The next design.

        Parameters
        ----------
        x : ndarray, (n,)
        F : ndarray, (1 + m,)
            Objective, then constraints (<= 0).
        dF : ndarray, (1 + m, n)

        Returns
        -------
        ndarray, (n,)
            A new array.
        """
        self._adapt(F, dF)
        self._place(x)
        model = self._model(x, F, dF)
        start = self.multipliers if self.multipliers.size == F.size - 1 else None
        new, self.multipliers = solve_dual(model, self._ceiling, start)
        self._remember(x, new, model, dF)
        return new

    def forget_model(self) -> None:
        """Do not hold the next values against the last model: the functions have changed."""
        self._predicted = np.empty(0)

    def state(self) -> dict[str, Array]:
        """All that the next step depends on; the arrays are never changed in place."""
        return {
            "steps": np.array([float(self._steps)]),
            "last": self._last,
            "before": self._before,
            "lower": self._lower,
            "upper": self._upper,
            "conservatism": self._conservatism,
            "predicted": self._predicted,
            "steepness": self._steepness,
            "distance": np.array([self._distance]),
            "multipliers": self.multipliers,
        }

    def restore(self, state: Mapping[str, Array]) -> None:
        """Go on from what `state` gave."""
        self._steps = int(state["steps"][0])
        self._last, self._before = state["last"], state["before"]
        self._lower, self._upper = state["lower"], state["upper"]
        self._conservatism, self._predicted = state["conservatism"], state["predicted"]
        self._steepness, self._distance = state["steepness"], float(state["distance"][0])
        self.multipliers = state["multipliers"]

    def _adapt(self, F: Array, dF: Array) -> None:
        least = _LEAST_CONSERVATISM * self._typical_slope(dF) + _TINY
        if self._conservatism.size != F.size or not self._adaptive:
            self._conservatism = least
        elif self._predicted.size == F.size:
            excess = (F - self._predicted) / self._distance
            old = self._conservatism
            more = np.minimum(1.1 * (old + excess), 10 * np.maximum(old, self._steepness))
            less = np.maximum(0.5 * old, least)
            self._conservatism = np.where(excess > 0, more, less)

    def _typical_slope(self, dF: Array) -> Array:
        """Mean slope over the range, weighted by itself: unknowns without effect do not count."""
        slope = np.abs(dF) * self._range
        return np.asarray((slope**2).sum(1) / np.maximum(slope.sum(1), 1e-300))

    def _place(self, x: Array) -> None:
        r = self._range
        if self._steps < 2:
            self._lower, self._upper = x - _FIRST * r, x + _FIRST * r
        else:
            trend = (x - self._last) * (self._last - self._before)
            factor = np.where(trend > 0, _WIDEN, np.where(trend < 0, _NARROW, 1.0))
            near, far = self._floor * r, _FARTHEST * r
            self._lower = x - np.clip(factor * (self._last - self._lower), near, far)
            self._upper = x + np.clip(factor * (self._upper - self._last), near, far)

    def _model(self, x: Array, F: Array, dF: Array) -> Separable:
        up, down = self._upper - x, x - self._lower
        convex = 1e-3 * np.abs(dF) + self._conservatism[:, None] / self._range
        p = up**2 * (np.maximum(dF, 0) + convex)
        q = down**2 * (np.maximum(-dF, 0) + convex)
        longest = self._move * self._range
        return Separable(
            p=p,
            q=q,
            r=F - (p / up + q / down).sum(1),
            lower=self._lower,
            upper=self._upper,
            low=np.maximum.reduce([self._low, x - _INSIDE * down, x - longest]),
            high=np.minimum.reduce([self._high, x + _INSIDE * up, x + longest]),
        )

    def _remember(self, x: Array, new: Array, model: Separable, dF: Array) -> None:
        up, down = self._upper - new, new - self._lower
        span = self._upper - self._lower
        distance = float((span * (new - x) ** 2 / (up * down * self._range)).sum())
        self._distance = max(distance, 1e-30)
        self._predicted = model.values(new)
        self._steepness = 0.1 * self._typical_slope(dF)
        self._before = self._last if self._steps else x
        self._last = x
        self._steps += 1

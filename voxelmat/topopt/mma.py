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
_FARTHEST = 10.0
_LEAST_CONSERVATISM = 1e-5


class MovingAsymptotes:
    """min f0(x) subject to f_i(x) <= 0 and low <= x <= high, one gradient a step.

    Scale f0 to about 10 and the f_i to about 1. The asymptotes come no closer than `floor` of
    the range: at the usual 0.01 target-deflection designs stall in a two-cycle at some per
    cent. When the last model was exceeded by the true value, the next is made more convex;
    otherwise it is relaxed by half. That is the globally convergent variant with its inner
    loop spread over the outer steps.

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
    ) -> None:
        self._low, self._high = low, high
        self._range = high - low
        self._move, self._floor, self._ceiling = move, floor, ceiling
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
        self._adapt(F)
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

    def _adapt(self, F: Array) -> None:
        if self._conservatism.size != F.size:
            self._conservatism = np.full(F.size, _LEAST_CONSERVATISM)
        elif self._predicted.size == F.size:
            excess = (F - self._predicted) / self._distance
            old = self._conservatism
            more = np.minimum(1.1 * (old + excess), 10 * np.maximum(old, self._steepness))
            less = np.maximum(0.5 * old, _LEAST_CONSERVATISM)
            self._conservatism = np.where(excess > 0, more, less)

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
            low=np.maximum.reduce([self._low, x - 0.9 * down, x - longest]),
            high=np.minimum.reduce([self._high, x + 0.9 * up, x + longest]),
        )

    def _remember(self, x: Array, new: Array, model: Separable, dF: Array) -> None:
        up, down = self._upper - new, new - self._lower
        span = self._upper - self._lower
        distance = float((span * (new - x) ** 2 / (up * down * self._range)).sum())
        self._distance = max(distance, 1e-30)
        self._predicted = model.values(new)
        self._steepness = 0.1 / x.size * (np.abs(dF) * self._range).sum(1)
        self._before = self._last if self._steps else x
        self._last = x
        self._steps += 1

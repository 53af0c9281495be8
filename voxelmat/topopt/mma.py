"""The method of moving asymptotes, and its variants that take steps back."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from voxelmat.kernels.mma import fill_model, place_asymptotes
from voxelmat.monitor import computing
from voxelmat.topopt.subproblem import BLOCKS, Separable, solve_dual

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
#: Excess over the model that the globally convergent variant lets pass: noise of the solver.
_SLACK = 1e-6
#: Steps back one after another, after which a design is taken as it is.
_MOST_BACK = {"none": 0, "worse": 5, "exceeded": 15}


class MovingAsymptotes:
    """min f0(x) subject to f_i(x) <= 0 and low <= x <= high, one gradient a step.

    Scale f0 to about 10 and the f_i to about 1. The asymptotes come no closer than `floor` of
    the range: at the usual 0.01 target-deflection designs stall in a two-cycle at some per
    cent.

    `back` says when a design is given up and the step to it taken again from the design before,
    with more convexity in the models that were exceeded:

    - ``"none"``: never. Compliance, whose models are good, is fastest so.
    - ``"worse"``: where a model was exceeded and the merit (objective plus what violation costs)
      rose. Between such steps the convexity adapts, up where a model was exceeded and else
      halved. Target deflections need it.
    - ``"exceeded"``: wherever a model was exceeded: the globally convergent method, with an
      evaluation for each of its inner iterations.

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
    back : str

    Attributes
    ----------
    multipliers : ndarray, (m,)
        Prices of the constraints in the last subproblem.
    accepted : bool
        Whether the design that `step` was last given became the one to go on from.

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
        back: Literal["none", "worse", "exceeded"] = "worse",
    ) -> None:
        self._low, self._high = low, high
        self._range = high - low
        self._move, self._floor, self._ceiling, self._back = move, floor, ceiling, back
        self._steps = self._refused = 0
        self._last = self._before = np.empty(0)
        self._lower = self._upper = np.empty(0)
        self._conservatism = self._predicted = self._steepness = np.empty(0)
        self._F, self._dF = np.empty(0), np.empty((0, 0))
        self._distance = 1.0
        self.multipliers = np.empty(0)
        self.accepted = True

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
        foreseen = self._predicted.size == F.size
        excess = (F - self._predicted) / self._distance if foreseen else np.zeros(F.size)
        self.accepted = not (foreseen and self._refuses(F, excess))
        if self.accepted:
            self._adapt(F, dF, excess, foreseen)
            self._place(x)
            self._refused = 0
        else:
            x, F, dF = self._last, self._F, self._dF
            self._conservatism = self._raised(excess)
            self._refused += 1
        model = self._model(x, F, dF)
        start = self.multipliers if self.multipliers.size == F.size - 1 else None
        new, self.multipliers = solve_dual(model, self._ceiling, start)
        if self._back != "none":
            self._foresee(x, new, model, F, dF)
        return new

    def forget_model(self) -> None:
        """Do not hold the next values against the last model: the functions have changed."""
        self._predicted = np.empty(0)

    def state(self) -> dict[str, Array]:
        """All that the next step depends on; the arrays are never changed in place."""
        return {
            "counts": np.array([self._steps, self._refused, self.accepted], dtype=np.float64),
            "last": self._last,
            "before": self._before,
            "lower": self._lower,
            "upper": self._upper,
            "conservatism": self._conservatism,
            "predicted": self._predicted,
            "steepness": self._steepness,
            "distance": np.array([self._distance]),
            "multipliers": self.multipliers,
            "F": self._F,
            "dF": self._dF,
        }

    def restore(self, state: Mapping[str, Array]) -> None:
        """Go on from what `state` gave."""
        steps, refused, accepted = state["counts"]
        self._steps, self._refused, self.accepted = int(steps), int(refused), bool(accepted)
        self._last, self._before = state["last"], state["before"]
        self._lower, self._upper = state["lower"], state["upper"]
        self._conservatism, self._predicted = state["conservatism"], state["predicted"]
        self._steepness, self._distance = state["steepness"], float(state["distance"][0])
        self.multipliers = state["multipliers"]
        self._F, self._dF = state["F"], state["dF"]

    # ------------------------------------------------------------------ conservatism
    def _refuses(self, F: Array, excess: Array) -> bool:
        """Whether the design that led to F is given up."""
        if self._refused >= _MOST_BACK[self._back]:
            return False
        if self._back == "exceeded":
            return bool(np.any(self._predicted + _SLACK * np.maximum(1.0, np.abs(F)) < F))
        return bool(np.any(excess > 0)) and self._merit(F) > self._merit(self._F)

    def _merit(self, F: Array) -> float:
        return float(F[0] + 2.0 * self.multipliers @ np.maximum(F[1:], 0.0))

    def _raised(self, excess: Array) -> Array:
        old = self._conservatism
        more = np.minimum(1.1 * (old + excess), 10 * np.maximum(old, self._steepness))
        return np.where(excess > 0, more, old)

    def _adapt(self, F: Array, dF: Array, excess: Array, foreseen: bool) -> None:
        """Convexity of the next models: what the last excess asks for, else half."""
        slope = self._typical_slope(dF)
        least = _LEAST_CONSERVATISM * slope + _TINY
        if self._back == "exceeded":
            self._conservatism = 0.1 * slope + _TINY
        elif self._conservatism.size != F.size or self._back == "none":
            self._conservatism = least
        elif foreseen:
            less = np.maximum(0.5 * self._conservatism, least)
            self._conservatism = np.where(excess > 0, self._raised(excess), less)

    def _typical_slope(self, dF: Array) -> Array:
        """Mean slope over the range, weighted by itself: unknowns without effect do not count."""
        slope = np.abs(dF) * self._range
        squares = np.einsum("ij,ij->i", slope, slope)
        return np.asarray(squares / np.maximum(slope.sum(1), 1e-300))

    # ------------------------------------------------------------------ model
    def _place(self, x: Array) -> None:
        r = self._range
        if self._steps < 2:
            self._lower, self._upper = x - _FIRST * r, x + _FIRST * r
        else:
            lower, upper = self._lower.copy(), self._upper.copy()
            with computing():
                place_asymptotes(
                    x, self._last, self._before, r, self._floor, _FARTHEST, _WIDEN, _NARROW,
                    lower, upper,
                )  # fmt: skip
            self._lower, self._upper = lower, upper
        self._before = self._last if self._steps else x
        self._last = x
        self._steps += 1

    def _model(self, x: Array, F: Array, dF: Array) -> Separable:
        p, q, touched = np.empty_like(dF), np.empty_like(dF), np.empty((BLOCKS, F.size))
        low, high = np.empty_like(x), np.empty_like(x)
        with computing():
            fill_model(
                x, dF, self._lower, self._upper, self._low, self._high, self._conservatism,
                self._move, _INSIDE, p, q, low, high, touched,
            )  # fmt: skip
        return Separable(
            p=p, q=q, r=F - touched.sum(0), lower=self._lower, upper=self._upper,
            low=low, high=high,
        )  # fmt: skip

    def _foresee(self, x: Array, new: Array, model: Separable, F: Array, dF: Array) -> None:
        """Keep what the next values are held against, and what a step back starts from."""
        up, down = self._upper - new, new - self._lower
        span = self._upper - self._lower
        distance = float((span * (new - x) ** 2 / (up * down * self._range)).sum())
        self._distance = max(distance, 1e-30)
        self._predicted = model.values(new)
        self._steepness = 0.1 * self._typical_slope(dF)
        self._F, self._dF = F, dF

"""Optimality criteria for one constraint, and a bound on how far a design is from the best."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError

__all__ = ["OptimalityCriteria", "linearised_gap"]

Array = NDArray[np.float64]


class OptimalityCriteria:
    """x <- x sqrt(-df0 / (multiplier df1)), the multiplier found by bisection.

    For one objective that falls and one constraint that rises with every unknown, such as
    compliance under a volume limit.

    Parameters
    ----------
    low, high : ndarray, (n,)
    move : float
        Longest step, of the range.

    References
    ----------
    Bendsoe, M. P. and Sigmund, O., Topology Optimization: Theory, Methods and Applications,
    2nd ed., Springer 2004, section 1.2 (from memory).
    """

    def __init__(self, low: Array, high: Array, *, move: float = 0.2) -> None:
        self._low, self._high = low, high
        self._longest = move * (high - low)
        self.multipliers = np.empty(0)
        self.accepted = True

    def step(self, x: Array, F: Array, dF: Array) -> Array:
        """The next design; arguments as for `MovingAsymptotes.step`, with m = 1."""
        if F.size != 2:
            raise InputError(
                f"Optimality criteria take exactly one constraint; got {F.size - 1}. "
                "Use moving asymptotes."
            )
        tiny = 1e-300
        scale = np.sqrt(np.maximum(-dF[0], 0.0) / np.maximum(dF[1], tiny))
        low = np.maximum(self._low, x - self._longest)
        high = np.minimum(self._high, x + self._longest)

        def candidate(log_multiplier: float) -> Array:
            return np.asarray(np.clip(x * scale * np.exp(-0.5 * log_multiplier), low, high))

        bottom, top = -200.0, 200.0
        while top - bottom > 1e-12:
            middle = 0.5 * (bottom + top)
            if F[1] + dF[1] @ (candidate(middle) - x) > 0:
                bottom = middle
            else:
                top = middle
        self.multipliers = np.array([np.exp(top)])
        return candidate(top)

    def forget_model(self) -> None:
        """Nothing is remembered between steps."""

    def state(self) -> dict[str, Array]:
        """All that the next step depends on: nothing but the multiplier that is reported."""
        return {"multipliers": self.multipliers}

    def restore(self, state: Mapping[str, Array]) -> None:
        """Go on from what `state` gave."""
        self.multipliers = state["multipliers"]


def linearised_gap(
    x: Array, low: Array, high: Array, F: Array, dF: Array, multipliers: Array
) -> float:
    """How much the objective could still fall in the problem linearised at x.

    min over lambda >= 0 of sum_j max_y (g0 + lambda g)_j (x - y)_j - lambda f, by duality of the
    linear programme; each lambda is refined by golden section from the optimiser's multiplier.
    It bounds the error from above where the problem is convex, and is far from sharp.

    Returns
    -------
    float
        In the unit of the objective, never negative for a feasible x.
    """
    down, up = x - low, high - x

    def bound(lam: Array) -> float:
        g = dF[0] + lam @ dF[1:]
        return float(np.where(g > 0, g * down, -g * up).sum() - lam @ F[1:])

    lam = np.maximum(multipliers.astype(np.float64), 0.0)
    best = bound(lam)
    golden = 0.6180339887498949
    for i in range(lam.size):
        centre = np.log(max(float(lam[i]), 1e-8))
        left, right = centre - 3.0, centre + 3.0

        def along(t: float, i: int = i) -> float:
            trial = lam.copy()
            trial[i] = np.exp(t)
            return bound(trial)

        for _ in range(14):
            a, b = right - golden * (right - left), left + golden * (right - left)
            if along(a) < along(b):
                right = b
            else:
                left = a
        if (value := along(0.5 * (left + right))) < best:
            best = value
            lam[i] = np.exp(0.5 * (left + right))
    return best

"""Mirror descent: gradient steps that keep resin fractions on the simplex, within budgets."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from voxelmat.kernels.mirror import interval_step, simplex_step
from voxelmat.monitor import computing
from voxelmat.topopt.subproblem import BLOCKS, climb_dual

__all__ = ["MirrorDescent"]

Array = NDArray[np.float64]

_LONGER, _SHORTER = 1.3, 3.0
_FIRST = 0.5  # exponent of the first step, mean over the unknowns weighted by slope
_LEAST = 1e-6  # a fraction of exactly 0 could never come back
_CEILING = 1e3
_MOST_BACK = 8


class MirrorDescent:
    """w <- w exp(-rate (df0 + prices df)) / sum: one gradient a step, no more memory than that.

    The prices of the budgets are those with which the linearised constraints hold. The rate
    grows by 1.3 a step; where the merit rises, the step is taken again from the design before,
    with a third of the rate. For many resins a step costs one exponential a fraction, less than
    a model of moving asymptotes.

    Parameters
    ----------
    n_rho : int
        Leading unknowns that lie between 0 and 1, such as densities.
    resins : int
        K; the other unknowns are (K, n) fractions that sum to 1 over K.
    ceiling : float
        Price of violation once no feasible point exists.

    Attributes
    ----------
    multipliers : ndarray, (m,)
    accepted : bool
        As for `MovingAsymptotes`.

    References
    ----------
    Beck, A. and Teboulle, M., Mirror descent and nonlinear projected subgradient methods for
    convex optimization, Oper. Res. Lett. 31 (2003) 167-175 (from memory).
    """

    def __init__(self, n_rho: int, resins: int, *, ceiling: float = _CEILING) -> None:
        self._n_rho, self._resins, self._ceiling = n_rho, resins, ceiling
        self._x, self._F, self._dF = np.empty(0), np.empty(0), np.empty((0, 0))
        self._rate, self._refused, self._known = 0.0, 0, False
        self.multipliers = np.empty(0)
        self.accepted = True

    def step(self, x: Array, F: Array, dF: Array) -> Array:
        """The next design; arguments as for `MovingAsymptotes.step`."""
        worse = self._known and self._merit(F) > self._merit(self._F)
        self.accepted = not worse or self._refused >= _MOST_BACK
        if self._rate == 0.0:
            slope = np.abs(dF[0])
            self._rate = _FIRST * float(slope.sum() / max(float((slope**2).sum()), 1e-300))
        elif self.accepted:
            self._rate *= _LONGER
        else:
            self._rate /= _SHORTER
        if self.accepted:
            self._x, self._F, self._dF, self._refused = x, F, dF, 0
        else:
            self._refused += 1
        self._known = True
        dual = _Dual(self._x, self._F, self._dF, self._n_rho, self._resins, self._rate)
        start = self.multipliers if self.multipliers.size == dual.m else None
        self.multipliers = climb_dual(dual, self._ceiling, start)
        return dual.x

    def _merit(self, F: Array) -> float:
        return float(F[0] + 2.0 * self.multipliers @ np.maximum(F[1:], 0.0))

    def forget_model(self) -> None:
        """Do not hold the next values against the last: the functions have changed."""
        self._known = False

    def state(self) -> dict[str, Array]:
        """All that the next step depends on; the arrays are never changed in place."""
        counts = [self._rate, self._refused, self._known, self.accepted]
        return {
            "counts": np.array(counts, dtype=np.float64),
            "x": self._x,
            "F": self._F,
            "dF": self._dF,
            "multipliers": self.multipliers,
        }

    def restore(self, state: Mapping[str, Array]) -> None:
        """Go on from what `state` gave."""
        rate, refused, known, accepted = state["counts"]
        self._rate, self._refused = float(rate), int(refused)
        self._known, self.accepted = bool(known), bool(accepted)
        self._x, self._F, self._dF = state["x"], state["F"], state["dF"]
        self.multipliers = state["multipliers"]


class _Dual:
    """Linearised constraints after the step, as functions of the prices."""

    def __init__(self, x: Array, F: Array, dF: Array, n_rho: int, resins: int, rate: float) -> None:
        rows = F.size
        self._old, self._rate, self._F = (x[:n_rho], x[n_rho:].reshape(resins, -1)), rate, F
        self._slope = (dF[:, :n_rho], dF[:, n_rho:].reshape(rows, resins, -1))
        self.m = rows - 1
        self.x = np.empty_like(x)
        self._new = (self.x[:n_rho], self.x[n_rho:].reshape(resins, -1))
        self._value = np.zeros((BLOCKS, self.m))
        self._curvature = np.zeros((BLOCKS, self.m, self.m))

    def __call__(self, multipliers: Array) -> tuple[Array, Array]:
        value, curvature = self._F[1:].copy(), np.zeros((self.m, self.m))
        for step, old, slope, new in zip(
            (interval_step, simplex_step), self._old, self._slope, self._new, strict=True
        ):
            if old.size:
                with computing():
                    step(
                        old, slope, multipliers, self._rate, _LEAST, new,
                        self._value, self._curvature,
                    )  # fmt: skip
                value += self._value.sum(0)
                curvature += self._curvature.sum(0)
        return value, curvature

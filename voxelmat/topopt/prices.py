"""What each limit costs: its multiplier at the last design, and the price that it stands for."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import nnls

from voxelmat.model.design_stages import Price
from voxelmat.topopt.problem import LayoutProblem

__all__ = ["multipliers", "prices_of"]

Array = NDArray[np.float64]

_ROUNDS = 6
#: A limit that is slack by more than this share of it costs nothing.
_ACTIVE = 5e-3
_STEP = 1e-4


def multipliers(x: Array, low: Array, high: Array, dF: Array) -> Array:
    """The multipliers >= 0 that come closest to making x stationary between its bounds.

    Minimises the squared gain that is left to each unknown in its box, sum of
    (g (x - low))^2 where g > 0 and (g (x - high))^2 where g < 0, g = dF0 + multipliers dF; the
    sides are those of the round before. So it does not depend on which optimiser made x.

    Parameters
    ----------
    x, low, high : ndarray, (n,)
    dF : ndarray, (1 + m, n)
        Derivatives of the objective and of the active constraints.

    Returns
    -------
    ndarray, (m,)
    """
    down, up = x - low, high - x
    m = len(dF) - 1
    if m == 0:
        return np.zeros(0)
    weight = np.minimum(down, up) + 1e-6
    found = np.zeros(m)
    for _ in range(_ROUNDS):
        rows = dF[1:] * weight
        size = np.maximum(np.sqrt((rows**2).sum(1)), 1e-300)
        rows = rows / size[:, None]
        # Normal equations by a Cholesky factor: nnls sees m rows instead of n.
        normal = rows @ rows.T + 1e-12 * np.eye(m)
        factor = np.linalg.cholesky(normal)
        right = np.linalg.solve(factor, -(rows @ (dF[0] * weight)))
        found = nnls(factor.T, right)[0] / size
        g = dF[0] + found @ dF[1:]
        weight = np.where(g > 0, down, up)
    return np.asarray(found)


def prices_of(problem: LayoutProblem, x: Array, values: Array) -> tuple[Price, ...]:
    """Prices of the limits that are reached at x, dearest (for one percent) first.

    Parameters
    ----------
    problem : LayoutProblem
        Set to its last stage, its solver closely.
    x : ndarray
    values : ndarray, (1 + m,)
        As reported at x.
    """
    if not problem.bounds:
        return ()
    e = problem.evaluate(x, problem.unknowns.sharpness)
    active = [n for n in range(len(problem.bounds)) if e.F[1 + n] > -_ACTIVE]
    rows = [0, *(1 + n for n in active)]
    found = multipliers(x, problem.low, problem.high, e.dF[rows])
    step = _STEP * max(abs(e.F[0]), 1e-300)
    report = problem.objective.report
    told = (report(e.F[0] + step) - report(e.F[0])) / step
    prices = []
    for n, multiplier in zip(active, found, strict=True):
        bound = problem.bounds[n]
        prices.append(
            Price(
                name=bound.response.name,
                unit=bound.response.unit,
                sense="at least" if bound.at_least else "at most",
                limit=bound.limit,
                objective=problem.objective.name,
                objective_value=float(values[0]),
                slope=float(-multiplier * told * bound.slope * problem.goal.sign),
            )
        )
    return tuple(sorted(prices, key=lambda p: -abs(p.slope * p.limit)))

"""One number for the several ways a design may come out: the worst, or mean plus deviations.

Both are given with their slope by each value, so that gradients follow by the chain rule.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

__all__ = ["added_by_scatter", "worst"]

Array = NDArray[np.float64]


def worst(values: Array, width: float) -> tuple[float, Array]:
    """Smooth maximum T log sum exp(y / T), T = width.

    It lies above the greatest value, by at most T log n.

    Parameters
    ----------
    values : ndarray, (n,)
    width : float

    Returns
    -------
    value : float
    slopes : ndarray, (n,)
        Not negative, of sum 1.
    """
    top = float(values.max())
    share = np.exp((values - top) / width)
    return top + width * math.log(float(share.sum())), share / share.sum()


def added_by_scatter(
    nominal: float, up: Array, down: Array, deviations: float, least: float
) -> tuple[float, float, Array, Array]:
    """Mean minus nominal, plus some standard deviations, to second order in each input.

    With f+ and f- at one standard deviation of independent inputs: the mean is
    f + sum (f+ + f- - 2 f) / 2, the variance sum ((f+ - f-) / 2)^2.

    Parameters
    ----------
    nominal : float
    up, down : ndarray, (inputs,)
    deviations : float
    least : float
        Deviations far below it are smoothed away (where they vanish, their slope jumps).

    Returns
    -------
    added : float
    by_nominal : float
    by_up, by_down : ndarray
        Slopes.
    """
    half = 0.5 * (up - down)
    size = math.sqrt(float((half**2).sum()) + least**2)
    added = 0.5 * float((up + down - 2.0 * nominal).sum()) + deviations * (size - least)
    along = deviations * 0.5 * half / size
    return added, -float(up.size), 0.5 + along, 0.5 - along

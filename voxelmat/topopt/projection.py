"""Smoothed step that drives filtered densities towards empty or solid."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError

__all__ = ["half_level", "project", "volume_keeping_threshold"]


def project(
    x: NDArray[np.float64], sharpness: float, threshold: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """[tanh(b n) + tanh(b (x - n))] / [tanh(b n) + tanh(b (1 - n))] and its derivative.

    Parameters
    ----------
    x : ndarray of float
        Filtered density in [0, 1].
    sharpness : float
        b; 0 leaves x as it is.
    threshold : float
        n in [0, 1].

    Returns
    -------
    value, derivative : ndarray of float
        0 stays 0 and 1 stays 1.

    References
    ----------
    Wang, F., Lazarov, B. S. and Sigmund, O., On projection methods, convergence and robust
    formulations in topology optimization, Struct. Multidisc. Optim. 43 (2011) 767-784.
    """
    if sharpness == 0:
        return x.copy(), np.ones_like(x)
    low = math.tanh(sharpness * threshold)
    span = low + math.tanh(sharpness * (1.0 - threshold))
    step = np.tanh(sharpness * (x - threshold))
    return (low + step) / span, sharpness * (1.0 - step * step) / span


def half_level(sharpness: float, threshold: float) -> float:
    """The filtered density that is projected to one half: where an outline is drawn."""
    if sharpness == 0:
        return 0.5
    low = math.tanh(sharpness * threshold)
    high = math.tanh(sharpness * (1.0 - threshold))
    return threshold + math.atanh(0.5 * (high - low)) / sharpness


def volume_keeping_threshold(x: NDArray[np.float64], sharpness: float) -> float:
    """The threshold at which projection leaves the sum of `x` unchanged.

    Bisection: the sum falls monotonically with the threshold, from above the sum of x at
    threshold 0 to below it at 1.

    Raises
    ------
    InputError
        If `x` is not within [0, 1] or the sharpness is not positive.
    """
    if not (x.size and np.all((x >= 0) & (x <= 1))):
        raise InputError("Densities to project must lie in [0, 1].")
    if not sharpness > 0:
        raise InputError(f"The sharpness of a projection must be positive; got {sharpness!r}.")
    goal = float(x.sum())
    low, high = 0.0, 1.0
    while high - low > 1e-16:
        middle = 0.5 * (low + high)
        if middle in (low, high):
            break
        if float(project(x, sharpness, middle)[0].sum()) > goal:
            low = middle
        else:
            high = middle
    return 0.5 * (low + high)

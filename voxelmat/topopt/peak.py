"""A smooth stand-in for a largest value: the p-norm, corrected to the true maximum as it runs."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.topopt.physics import Physics

__all__ = ["corrected_peak", "smooth_peak"]

Array = NDArray[np.float64]

# Share of the newest ratio of maximum to norm in the factor that is kept for the next design.
_NEW = 0.5


def smooth_peak(values: Array, exponent: float) -> tuple[float, Array]:
    """(sum v^P)^(1/P) of the values above 0, and its slope; 0 where there are none."""
    positive = np.maximum(values, 0.0)
    largest = float(positive.max(initial=0.0))
    if largest == 0.0:
        return 0.0, np.zeros(values.shape)
    norm = largest * float(((positive / largest) ** exponent).sum()) ** (1.0 / exponent)
    return norm, (positive / norm) ** (exponent - 1.0)


def corrected_peak(
    physics: Physics, key: str, values: Array, exponent: float
) -> tuple[float, Array]:
    """The p-norm times a factor that brings it to the true maximum.

    The factor is kept from design to design under `key` and is constant for derivatives: once
    designs change little, value and maximum agree. The first design sets it.
    """
    norm, slope = smooth_peak(values, exponent)
    if norm == 0.0:
        return 0.0, slope
    ratio = float(values.max()) / norm
    kept = physics.recall(key)
    factor = ratio if kept is None else float(kept[0])
    physics.remember(key, np.array([(1.0 - _NEW) * factor + _NEW * ratio]))
    return factor * norm, factor * slope

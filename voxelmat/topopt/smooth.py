"""A smooth maximum with its slopes, corrected to the true one as a run goes on.

The p-norm (sum v^P)^(1/P) of many equal values lies far above the largest (1.9 times for the
stresses of a bracket at P = 8). So it is scaled by the ratio of the true maximum to it (C. Le,
J. Norato, T. Bruns, C. Ha, D. Tortorelli, Struct. Multidisc. Optim. 41 (2010) 605, from memory).
The ratio is taken at some designs and held in between, not brought up to date at each: then
value and gradient belong together, and an optimiser that compares a design with the one before it
compares values of one function. It goes into checkpoints.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from voxelmat.topopt.physics import Physics
from voxelmat.topopt.responses import Slopes

__all__ = ["correction", "scaled", "smooth_maximum"]

Array = NDArray[np.float64]


def smooth_maximum(values: Array, exponent: float) -> tuple[float, Array]:
    """p-norm of values >= 0 of any shape, and its slope by each; 0 where all are 0."""
    largest = float(values.max(initial=0.0))
    if largest <= 0.0:
        return 0.0, np.zeros_like(values)
    ratio = values / largest
    total = float((ratio**exponent).sum())
    slope = total ** (1.0 / exponent - 1.0) * ratio ** (exponent - 1.0)
    return largest * total ** (1.0 / exponent), slope


def correction(physics: Physics, key: str, value: float, largest: float) -> float:
    """The ratio that `physics` remembers under `key`, taken anew where it says so; 1 for value 0.

    Apply it last: adjoints that the solver keeps must not depend on it.
    """
    if value == 0.0:
        return 1.0
    known = None if physics.renewing else physics.recall(f"ratio {key}")
    if known is not None:
        return float(known[0])
    physics.remember(f"ratio {key}", np.array([largest / value]))
    return largest / value


def scaled(ratio: float, value: float, slopes: Mapping[str, Array]) -> tuple[float, Slopes]:
    """Value and slopes times the ratio."""
    return ratio * value, {key: ratio * slope for key, slope in slopes.items()}

"""A circle through points in a plane, by least squares of the true distances."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["Circle", "fitted_circle"]

_STEPS = 20


@dataclass(frozen=True, slots=True, kw_only=True)
class Circle:
    """A fitted circle.

    Attributes
    ----------
    centre : tuple of float
    radius : float
    rms : float
        Of the distances of the points from the circle.
    form : float
        Farthest outside plus farthest inside.
    """

    centre: tuple[float, float]
    radius: float
    rms: float
    form: float


def fitted_circle(points: NDArray[np.float64]) -> Circle:
    """Fit a circle to at least three points, shape (n, 2).

    The start is the algebraic fit of Kasa (1976, IEEE Transactions on Instrumentation and
    Measurement 25, 8-14; from memory); Gauss-Newton steps on the distances follow.
    """
    x, y = points.T
    table = np.column_stack([x, y, np.ones_like(x)])
    a, b, c = np.linalg.lstsq(table, x**2 + y**2, rcond=None)[0]
    cx, cy = a / 2, b / 2
    radius = float(np.sqrt(max(c + cx**2 + cy**2, 0.0)))
    for _ in range(_STEPS):
        dx, dy = x - cx, y - cy
        size = np.maximum(np.hypot(dx, dy), 1e-12)
        slope = np.column_stack([dx / size, dy / size, np.ones_like(x)])
        step = np.linalg.lstsq(slope, size - radius, rcond=None)[0]
        cx, cy, radius = cx + step[0], cy + step[1], radius + float(step[2])
        if float(np.abs(step).max()) < 1e-12 * max(radius, 1.0):
            break
    off = np.hypot(x - cx, y - cy) - radius
    return Circle(
        centre=(float(cx), float(cy)),
        radius=radius,
        rms=float(np.sqrt((off**2).mean())),
        form=float(off.max() - off.min()),
    )

"""The trilinear box element of a scalar field: conduction and capacity, mode by mode."""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError

__all__ = ["CAPACITIES", "element_matrices", "interpolation", "modal_factors"]

Double = NDArray[np.float64]
Spacing = tuple[float, float, float]

#: ``lumped``: a node holds the heat of the eighths of voxels round it, and a sudden change does
#: not make the field overshoot; ``consistent``: the integral of products of shape functions.
CAPACITIES = ("lumped", "consistent")


def modal_factors(spacing: Spacing, capacity: str) -> tuple[Double, Double]:
    """Factors of the 8 sums and differences of a voxel's corner values.

    With q = H u (mode m takes differences along x, y, z where bits 0, 1, 2 of m are set, sums
    along the others), the element matrices are H^T diag(k p) H for the conductivity k and
    H^T diag(c q) H for the capacity a volume c. Along one axis a box of length h has the forms
    D^2 / h (slope squared) and h (S^2 / 4 + D^2 / 12) (value squared), S the sum and D the
    difference of its two ends; the factors are products of these.

    Returns
    -------
    conduction, capacity : ndarray, shape (8,)
        mm, and mm^3.
    """
    if capacity not in CAPACITIES:
        raise InputError(f"capacity is one of {', '.join(CAPACITIES)}; got {capacity!r}.")
    conduction, mass = np.zeros(8), np.zeros(8)
    for m in range(8):
        bits = [m >> d & 1 for d in range(3)]
        value = [h / 12 if b else h / 4 for b, h in zip(bits, spacing, strict=True)]
        for d in range(3):
            if bits[d]:
                others = np.prod([value[e] for e in range(3) if e != d])
                conduction[m] += others / spacing[d]
        mass[m] = np.prod(value) if capacity == "consistent" else np.prod(spacing) / 64
    return conduction, mass


def element_matrices(spacing: Spacing, capacity: str) -> tuple[Double, Double]:
    """The same as (8, 8) matrices over the corners."""
    corner = np.arange(8)
    bits = corner[:, None] & corner[None, :]
    low = np.array([bin(c).count("1") for c in range(8)])
    # Corner c enters mode m with -1 for each set bit of m at which c is the low end.
    H = np.where((low[corner][:, None] - low[bits]) % 2, -1.0, 1.0)
    p, q = modal_factors(spacing, capacity)
    return H.T @ np.diag(p) @ H, H.T @ np.diag(q) @ H


@lru_cache(maxsize=1)
def interpolation() -> Double:
    """From the corners of a coarse voxel to those of its 8 children, (8, 8, 8)."""
    out = np.ones((8, 8, 8))
    for child, a, b in np.ndindex(8, 8, 8):
        for d in range(3):
            t = ((child >> d & 1) + (a >> d & 1)) / 2
            out[child, a, b] *= t if b >> d & 1 else 1 - t
    return out

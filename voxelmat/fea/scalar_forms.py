"""How forms of a scalar field change with the constant of each voxel: for heat and mass."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["scalar_forms"]

Double = NDArray[np.float64]


def _modes(u: Double) -> list[Double]:
    """Sums and differences of corner values; bits of the place say along which axes it varies."""
    out = [u]
    for axis in (-1, -2, -3):
        low, high = [slice(None)] * 3, [slice(None)] * 3
        low[axis], high[axis] = slice(None, -1), slice(1, None)
        pairs = [(q[tuple(low)], q[tuple(high)]) for q in out]
        out = [a + b for a, b in pairs] + [b - a for a, b in pairs]
    return out


def scalar_forms(u: Double, v: Double, factors: Double) -> Double:
    """Derivative of v . A u by the constant of each voxel, where A = sum_voxels c_e H^T diag(q) H.

    Parameters
    ----------
    u, v : ndarray of float64, shape (nz+1, ny+1, nx+1) or (3, nz+1, ny+1, nx+1)
        Node fields; of several components the sum is taken.
    factors : ndarray, shape (8,)
        q, see `voxelmat.fea.scalar_element.modal_factors`: those of conduction for a
        conductivity, those of capacity for a capacity or a density.

    Returns
    -------
    ndarray, shape (nz, ny, nx)
    """
    if u.ndim == 4:
        return np.asarray(sum(scalar_forms(a, b, factors) for a, b in zip(u, v, strict=True)))
    left = _modes(u)
    right = left if v is u else _modes(v)
    out = np.zeros(left[0].shape)
    for q, a, b in zip(factors, left, right, strict=True):
        if q:
            out += q * a * b
    return out

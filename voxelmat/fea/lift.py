"""The rigid motion in given displacements, which strains nothing and should cost no accuracy."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.fea.element import Spacing

__all__ = ["rigid_lift"]

Double = NDArray[np.float64]

# Directions of the rigid motions that the given displacements say less about than this share.
_RANK = 1e-9


def rigid_lift(given: Double, held: NDArray[np.bool_], spacing: Spacing) -> Double:
    """The rigid motion nearest to the given displacements, on all nodes.

    A residual relative to the force that moves the supports alone, while the rest stays behind,
    would say little about a part that is mostly carried along.

    Parameters
    ----------
    given : ndarray of float64, shape (3, nz+1, ny+1, nx+1)
        mm, read where `held`.
    held : ndarray of bool, same shape
    spacing : tuple of float
        mm.

    Returns
    -------
    ndarray of float64
        The same shape; the smallest motion where several are as near.
    """
    size = np.array(given.shape[:0:-1])
    half = 0.5 * (size - 1) * spacing
    scale = float(half.max())
    x, y, z = ((np.arange(n) * h - m) / scale for n, h, m in zip(size, spacing, half, strict=True))
    where = np.nonzero(held)
    place = np.stack([x[where[3]], y[where[2]], z[where[1]]], axis=1)
    rows = np.zeros((len(place), 6))
    rows[np.arange(len(place)), where[0]] = 1.0
    for d in range(3):  # u = w x r
        e, f = (d + 1) % 3, (d + 2) % 3
        mine = where[0] == d
        rows[mine, 3 + e], rows[mine, 3 + f] = place[mine, f], -place[mine, e]
    t = np.linalg.pinv(rows.T @ rows, rcond=_RANK, hermitian=True) @ (rows.T @ given[where])
    out = np.empty_like(given)
    out[0] = t[0] + t[4] * z[:, None, None] - t[5] * y[None, :, None]
    out[1] = t[1] + t[5] * x[None, None, :] - t[3] * z[:, None, None]
    out[2] = t[2] + t[3] * y[None, :, None] - t[4] * x[None, None, :]
    return out

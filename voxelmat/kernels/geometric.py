"""Initial-stress (geometric) stiffness times displacement on a voxel grid, without a matrix.

In the sums and differences of a voxel's corner values (a Walsh-Hadamard transform) the work of a
stress on the products of displacement gradients has few terms, also where the stress varies
linearly across the voxel; every component of the displacement sees the same matrix.
"""

import numpy as np
from numba import njit, prange

_FAST = {"reassoc", "contract", "nsz"}


@njit(fastmath=_FAST)
def _material(s, Q, F, k, j, i):
    """F <- half the slope of the work of the stresses s of a voxel on the modes Q."""
    xx, yy, zz = s[0, k, j, i], s[1, k, j, i], s[2, k, j, i]
    xy, xz, yz = s[3, k, j, i], s[4, k, j, i], s[5, k, j, i]
    x_yy, x_zz, x_yz = s[6, k, j, i] / 3, s[7, k, j, i] / 3, s[8, k, j, i] / 3
    y_xx, y_zz, y_xz = s[9, k, j, i] / 3, s[10, k, j, i] / 3, s[11, k, j, i] / 3
    z_xx, z_yy, z_xy = s[12, k, j, i] / 3, s[13, k, j, i] / 3, s[14, k, j, i] / 3
    q1, q2, q3, q4, q5, q6, q7 = Q[1], Q[2], Q[3], Q[4], Q[5], Q[6], Q[7]
    F[0] = 0.0
    F[1] = xx * q1 + xy * q2 + xz * q4 + y_xx * q3 + z_xx * q5 + (y_xz + z_xy) * q6
    F[2] = yy * q2 + xy * q1 + yz * q4 + x_yy * q3 + z_yy * q6 + (x_yz + z_xy) * q5
    F[4] = zz * q4 + xz * q1 + yz * q2 + x_zz * q5 + y_zz * q6 + (x_yz + y_xz) * q3
    F[3] = (xx + yy) * q3 / 3 + (xz * q6 + yz * q5) / 3
    F[3] += x_yy * q2 + y_xx * q1 + (x_yz + y_xz) * q4 + (z_xx + z_yy) * q7 / 3
    F[5] = (xx + zz) * q5 / 3 + (xy * q6 + yz * q3) / 3
    F[5] += x_zz * q4 + z_xx * q1 + (x_yz + z_xy) * q2 + (y_xx + y_zz) * q7 / 3
    F[6] = (yy + zz) * q6 / 3 + (xy * q5 + xz * q3) / 3
    F[6] += y_zz * q4 + z_yy * q2 + (y_xz + z_xy) * q1 + (x_yy + x_zz) * q7 / 3
    F[7] = (xx + yy + zz) * q7 / 9
    F[7] += ((x_yy + x_zz) * q6 + (y_xx + y_zz) * q5 + (z_xx + z_yy) * q3) / 3


@njit(fastmath=_FAST)
def _slab(u, s, full, y, k):
    Q = np.empty(8)
    F = np.empty(8)
    for j in range(full.shape[1]):
        for i in range(full.shape[2]):
            if not full[k, j, i]:
                continue
            for d in range(3):
                for n in range(8):
                    Q[n] = u[d, k + (n >> 2), j + ((n >> 1) & 1), i + (n & 1)]
                for b in (1, 2, 4):
                    for n in range(8):
                        if n & b == 0:
                            p = Q[n]
                            q = Q[n + b]
                            Q[n] = p + q
                            Q[n + b] = q - p
                _material(s, Q, F, k, j, i)
                for b in (1, 2, 4):
                    for n in range(8):
                        if n & b == 0:
                            p = F[n]
                            q = F[n + b]
                            F[n] = p - q
                            F[n + b] = p + q
                for n in range(8):
                    y[d, k + (n >> 2), j + ((n >> 1) & 1), i + (n & 1)] += F[n]


@njit(parallel=True, cache=True)
def apply_geometric(u, s, full, y):
    """Write the initial-stress matrix times u to y.

    u, y are [3, nz+1, ny+1, nx+1]; full[nz, ny, nx] says which voxels count. s[15, nz, ny, nx]
    are stresses times volume times the gradient factors (1 / 4 h) of their two axes: six constant
    ones xx, yy, zz, xy, xz, yz, then those that grow linearly along x (yy, zz, yz), along y (xx,
    zz, xz) and along z (xx, yy, xy), as values at the voxel's upper end. Even slabs of voxels come
    first, then odd ones, so every node is summed in one order whatever the number of threads.
    """
    for k in prange(y.shape[1]):
        y[:, k] = 0.0
    for parity in range(2):
        for t in prange((full.shape[0] - parity + 1) // 2):
            _slab(u, s, full, y, 2 * t + parity)

"""Inverses of the 3x3 block of the stiffness at every node: what the smoother multiplies by.

B[6, nz+1, ny+1, nx+1] holds xx, yy, zz, xy, xz, yz; rows and columns of unknowns that do not
exist (held, or not touched by any material) are zero, so B also says which unknowns exist.
"""

import numpy as np
from numba import njit, prange

_FAST = {"reassoc", "contract", "arcp", "nsz"}


@njit(fastmath=_FAST, error_model="numpy")
def _corner_block(row, lam, mu, w, c):
    tiny, s0, s1, s2, t0, t1, t2 = c[5], c[6], c[7], c[8], c[9], c[10], c[11]
    w0, w1, w2, w3 = w[0], w[1], w[2], w[3]
    for i in range(row.size):
        m2 = mu[i] + mu[i]
        star = m2 * lam[i] / (lam[i] + m2 + tiny)
        ls = s0 * star + s1 * lam[i] + s2 * mu[i]
        lb = t0 * star + t1 * lam[i] + t2 * mu[i]
        row[i] += w0 * lam[i] + w1 * mu[i] + w2 * ls + w3 * lb


@njit(error_model="numpy")
def _invert(row, i, f0, f1, f2, least):
    """Invert block i of row[6, n] in place on the unknowns whose flag f is 1."""
    t = max(row[0, i], row[1, i], row[2, i])
    if not t > 0.0:
        for e in range(6):
            row[e, i] = 0.0
        return
    # Unknowns that do not exist get a unit row, which is taken out again below.
    a = f0 * row[0, i] / t + 1.0 - f0
    b = f1 * row[1, i] / t + 1.0 - f1
    c = f2 * row[2, i] / t + 1.0 - f2
    d = f0 * f1 * row[3, i] / t
    e = f0 * f2 * row[4, i] / t
    f = f1 * f2 * row[5, i] / t
    det = a * (b * c - f * f) - d * (d * c - e * f) + e * (d * f - b * e)
    if det > least * a * b * c and a > 0.0 and b > 0.0 and c > 0.0:
        s = 1.0 / (det * t)
        row[0, i] = f0 * s * (b * c - f * f)
        row[1, i] = f1 * s * (a * c - e * e)
        row[2, i] = f2 * s * (a * b - d * d)
        row[3, i] = s * (e * f - d * c)
        row[4, i] = s * (d * f - b * e)
        row[5, i] = s * (d * e - a * f)
    else:
        # Nearly singular (a node that hangs on one mode): the diagonal is enough.
        row[0, i] = f0 / (a * t) if a > 0.0 else 0.0
        row[1, i] = f1 / (b * t) if b > 0.0 else 0.0
        row[2, i] = f2 / (c * t) if c > 0.0 else 0.0
        row[3, i] = 0.0
        row[4, i] = 0.0
        row[5, i] = 0.0


@njit(error_model="numpy")
def _inverse_plane(lam, mu, springs, c, basis, free, B, k):
    nz, ny, nx = lam.shape
    row = np.empty((6, nx + 1))
    for j in range(ny + 1):
        row[:] = 0.0
        for a in range(8):
            kk = k - (a >> 2)
            jj = j - ((a >> 1) & 1)
            if 0 <= kk < nz and 0 <= jj < ny:
                x = a & 1
                for e in range(6):
                    _corner_block(row[e][x : x + nx], lam[kk, jj], mu[kk, jj], basis[a, e], c)
        for i in range(nx + 1):
            if springs.size > 0:
                for d in range(3):
                    row[d, i] += springs[d, k, j, i]
            f0 = float(free[0, k, j, i])
            f1 = float(free[1, k, j, i])
            f2 = float(free[2, k, j, i])
            _invert(row, i, f0, f1, f2, 1e-12)
            for e in range(6):
                B[e, k, j, i] = row[e, i]


@njit(parallel=True, cache=True)
def voxel_inverses(lam, mu, springs, c, basis, free, B):
    """Set B <- inverse nodal blocks of voxels lam, mu [nz, ny, nx] plus springs, in double inside.

    springs is [3, nz+1, ny+1, nx+1] or has no entries; basis[8, 6, 4] are the corner blocks that
    the four coefficients of a voxel multiply; c are the constants of the element; free[3, ...]
    is 1 where an unknown exists.
    """
    for k in prange(B.shape[1]):
        _inverse_plane(lam, mu, springs, c, basis, free, B, k)


@njit(error_model="numpy")
def _stencil_plane(S, B, k):
    row = np.empty((6, 1))
    o = 13 * 9
    for j in range(S.shape[1]):
        for i in range(S.shape[3]):
            row[0, 0] = S[k, j, o, i]
            row[1, 0] = S[k, j, o + 4, i]
            row[2, 0] = S[k, j, o + 8, i]
            row[3, 0] = S[k, j, o + 1, i]
            row[4, 0] = S[k, j, o + 2, i]
            row[5, 0] = S[k, j, o + 5, i]
            _invert(row, 0, 1.0, 1.0, 1.0, 1e-6)
            for e in range(6):
                B[e, k, j, i] = row[e, 0]


@njit(parallel=True, cache=True)
def stencil_inverses(S, B):
    """Set B <- inverse centre blocks of the stencils S[nk, nj, 243, ni]."""
    for k in prange(B.shape[1]):
        _stencil_plane(S, B, k)

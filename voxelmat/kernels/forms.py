"""Per voxel: the four bilinear forms of its stiffness, the strain at its centre, its adjoint.

The forms answer "how does v . K u change with the Lame constants of this voxel", which is what
gradients are made of.
"""

import numpy as np
from numba import njit, prange

_FAST = {"reassoc", "contract", "arcp", "nsz"}


@njit(fastmath=_FAST)
def _modes(u, k, j, i, g, Q):
    """Gradient-scaled modes of a voxel: Q[d, n], bits of n say along which axes it varies."""
    for d in range(3):
        for n in range(8):
            Q[d, n] = u[d, k + (n >> 2), j + ((n >> 1) & 1), i + (n & 1)]
        for s in (1, 2, 4):
            for n in range(8):
                if n & s == 0:
                    p = Q[d, n]
                    q = Q[d, n + s]
                    Q[d, n] = p + q
                    Q[d, n + s] = q - p


@njit(fastmath=_FAST)
def _forms(A, B, gx, gy, gz, kept):
    """v.B_i u for the coefficients (lam, mu, linear lam, bilinear modulus)."""
    ex, ey, ez = gx * A[0, 1], gy * A[1, 2], gz * A[2, 4]
    fx, fy, fz = gx * B[0, 1], gy * B[1, 2], gz * B[2, 4]
    ql = (ex + ey + ez) * (fx + fy + fz)
    qm = 2.0 * (ex * fx + ey * fy + ez * fz)
    qm += (gy * A[0, 2] + gx * A[1, 1]) * (gy * B[0, 2] + gx * B[1, 1])
    qm += (gz * A[0, 4] + gx * A[2, 1]) * (gz * B[0, 4] + gx * B[2, 1])
    qm += (gz * A[1, 4] + gy * A[2, 2]) * (gz * B[1, 4] + gy * B[2, 2])

    a1, a2, b1, b2 = gy * A[1, 3], gz * A[2, 5], gy * B[1, 3], gz * B[2, 5]
    a3, a4, b3, b4 = gx * A[0, 3], gz * A[2, 6], gx * B[0, 3], gz * B[2, 6]
    a5, a6, b5, b6 = gx * A[0, 5], gy * A[1, 6], gx * B[0, 5], gy * B[1, 6]
    qs = ((a1 + a2) * (b1 + b2) + (a3 + a4) * (b3 + b4) + (a5 + a6) * (b5 + b6)) / 3.0
    lin = 2.0 * (a1 * b1 + a2 * b2 + a3 * b3 + a4 * b4 + a5 * b5 + a6 * b6)
    lin += (gz * A[1, 5] + gy * A[2, 3]) * (gz * B[1, 5] + gy * B[2, 3])
    lin += (gz * A[0, 6] + gx * A[2, 3]) * (gz * B[0, 6] + gx * B[2, 3])
    lin += (gy * A[0, 6] + gx * A[1, 5]) * (gy * B[0, 6] + gx * B[1, 5])
    xx, yy, zz = gx * gx, gy * gy, gz * gz
    par = yy * A[0, 3] * B[0, 3] + zz * A[0, 5] * B[0, 5] + xx * A[1, 3] * B[1, 3]
    par += zz * A[1, 6] * B[1, 6] + xx * A[2, 5] * B[2, 5] + yy * A[2, 6] * B[2, 6]
    h0, h1, h2 = A[0, 7] * B[0, 7], A[1, 7] * B[1, 7], A[2, 7] * B[2, 7]
    qb = (xx * h0 + yy * h1 + zz * h2) / 9.0
    bil = ((yy + zz) * h0 + (xx + zz) * h1 + (xx + yy) * h2) / 9.0
    return ql, qm + lin / 3.0 + kept * par + bil, qs, qb


@njit(fastmath=_FAST, error_model="numpy")
def _forms_plane(u, v, lam, mu, c, dlam, dmu, k):
    A = np.empty((3, 8))
    B = np.empty((3, 8))
    for j in range(lam.shape[1]):
        for i in range(lam.shape[2]):
            _modes(u, k, j, i, c, A)
            _modes(v, k, j, i, c, B)
            ql, qm, qs, qb = _forms(A, B, c[0], c[1], c[2], c[12])
            m2 = 2.0 * mu[k, j, i]
            s = lam[k, j, i] + m2 + c[5]
            sl = m2 * m2 / (s * s)  # d l*/d lam
            sm = 2.0 * lam[k, j, i] ** 2 / (s * s)  # d l*/d mu
            dlam[k, j, i] = ql + (c[6] * sl + c[7]) * qs + (c[9] * sl + c[10]) * qb
            dmu[k, j, i] = qm + (c[6] * sm + c[8]) * qs + (c[9] * sm + c[11]) * qb


@njit(parallel=True, cache=True)
def stiffness_slopes(u, v, lam, mu, c, dlam, dmu):
    """dlam, dmu[nz, ny, nx] <- derivatives of v . K u with respect to lam, mu of each voxel."""
    for k in prange(lam.shape[0]):
        _forms_plane(u, v, lam, mu, c, dlam, dmu, k)


@njit(fastmath=_FAST)
def _strain_plane(u, g, out, k):
    Q = np.empty((3, 8))
    gx, gy, gz = 0.25 * g[0], 0.25 * g[1], 0.25 * g[2]
    for j in range(out.shape[2]):
        for i in range(out.shape[3]):
            _modes(u, k, j, i, g, Q)
            out[0, k, j, i] = gx * Q[0, 1]
            out[1, k, j, i] = gy * Q[1, 2]
            out[2, k, j, i] = gz * Q[2, 4]
            out[3, k, j, i] = gy * Q[0, 2] + gx * Q[1, 1]
            out[4, k, j, i] = gz * Q[0, 4] + gx * Q[2, 1]
            out[5, k, j, i] = gz * Q[1, 4] + gy * Q[2, 2]


@njit(parallel=True, cache=True)
def centre_strain(u, g, out):
    """out[6, nz, ny, nx] <- strain xx, yy, zz, xy, xz, yz (engineering shear), g = 1 / spacing."""
    for k in prange(out.shape[1]):
        _strain_plane(u, g, out, k)


@njit(fastmath=_FAST)
def _adjoint_plane(s, g, f, k):
    _, nz, ny, nx = s.shape
    for j in range(ny + 1):
        for i in range(nx + 1):
            f0 = 0.0
            f1 = 0.0
            f2 = 0.0
            for a in range(8):
                kk = k - (a >> 2)
                jj = j - ((a >> 1) & 1)
                ii = i - (a & 1)
                if 0 <= kk < nz and 0 <= jj < ny and 0 <= ii < nx:
                    gx = g[0] * (0.25 if a & 1 else -0.25)
                    gy = g[1] * (0.25 if a & 2 else -0.25)
                    gz = g[2] * (0.25 if a & 4 else -0.25)
                    xx, yy, zz = s[0, kk, jj, ii], s[1, kk, jj, ii], s[2, kk, jj, ii]
                    xy, xz, yz = s[3, kk, jj, ii], s[4, kk, jj, ii], s[5, kk, jj, ii]
                    f0 += gx * xx + gz * xz + gy * xy
                    f1 += gy * yy + gz * yz + gx * xy
                    f2 += gz * zz + gy * yz + gx * xz
            f[0, k, j, i] = f0
            f[1, k, j, i] = f1
            f[2, k, j, i] = f2


@njit(parallel=True, cache=True)
def centre_strain_adjoint(s, g, f):
    """f[3, nz+1, ny+1, nx+1] <- transpose of `centre_strain` applied to s[6, nz, ny, nx]."""
    for k in prange(f.shape[1]):
        _adjoint_plane(s, g, f, k)

"""Exact coarse operators of a scalar field, as 27-point stencils: the Galerkin products P^T A P.

Element matrices lie as E[K, J, 8 a + b, I] for corners a, b of coarse voxel (I, J, K), so that
loops run along x. The interpolation from the corners of a coarse voxel to those of its child t is
P[t], [8, 8].
"""

import numpy as np
from numba import njit, prange

_FAST = {"reassoc", "contract", "nsz"}


@njit(fastmath=_FAST)
def _add_strided(out, fine, x, w):
    for n in range((fine.size - x + 1) // 2):
        out[n] += w * fine[2 * n + x]


@njit(parallel=True, cache=True)
def elements_from_elements(F, entries, weights, E):
    """Set E <- element matrices one level below those of F, or below the coefficients of voxels.

    F is [nz, ny, entries, nx]: element matrices, or conductivities and capacities. entries[t, n]
    holds (entry of E, entry of F) and weights[t, n] how much of the second adds to the first for
    child t; 0 where a list is shorter.
    """
    for K in prange(E.shape[0]):
        for J in range(E.shape[1]):
            E[K, J] = 0
            for t in range(8):
                z, y, x = 2 * K + (t >> 2), 2 * J + ((t >> 1) & 1), t & 1
                if z < F.shape[0] and y < F.shape[1]:
                    for m in range(weights.shape[1]):
                        o, f = entries[t, m, 0], entries[t, m, 1]
                        if weights[t, m] != 0:
                            _add_strided(E[K, J, o], F[z, y, f], x, weights[t, m])


@njit(cache=True, nogil=True, fastmath=_FAST)
def add_special(at, cond, cap, held, extra, K0, C0, P, E):
    """Add to E of the first coarse level the voxels of which some nodes are not plain unknowns.

    at [n, 3] are their places (k, j, i); cond, cap [nz, ny, nx] multiply the element matrices K0
    and C0 [8, 8]; held [nz+1, ny+1, nx+1] marks nodes without an unknown, extra of the same shape
    is a diagonal matrix divided by the voxels of the grid round each node.
    """
    size = P.shape[1]  # 8; not written as a number, or the compiler unrolls every loop
    A, AP = np.empty((size, size)), np.empty((size, size))
    for v in range(at.shape[0]):
        z, y, x = at[v, 0], at[v, 1], at[v, 2]
        Q = P[(x & 1) + 2 * (y & 1) + 4 * (z & 1)]
        for a in range(size):
            az, ay, ax = z + (a >> 2), y + ((a >> 1) & 1), x + (a & 1)
            for b in range(size):
                bz, by, bx = z + (b >> 2), y + ((b >> 1) & 1), x + (b & 1)
                A[a, b] = cond[z, y, x] * K0[a, b] + cap[z, y, x] * C0[a, b]
                if held[az, ay, ax] or held[bz, by, bx]:
                    A[a, b] = 0.0
            if not held[az, ay, ax]:
                A[a, a] += extra[az, ay, ax]
        for a in range(size):
            AP[a] = 0.0
            for m in range(size):
                for b in range(size):
                    AP[a, b] += A[a, m] * Q[m, b]
        for m in range(size):
            for a in range(size):
                for b in range(size):
                    E[z >> 1, y >> 1, size * a + b, x >> 1] += Q[m, a] * AP[m, b]


@njit(fastmath=_FAST)
def _add(a, b):
    for i in range(b.size):
        a[i] += b[i]


@njit(parallel=True, cache=True)
def stencils_from_elements(E, S):
    """Set S[k, j, o, i] <- the coupling of node (i, j, k) with its neighbour o.

    o = 9 (dk + 1) + 3 (dj + 1) + (di + 1).
    """
    nz, ny, _, nx = E.shape
    for k in prange(nz + 1):
        S[k] = 0
        for a in range(8):
            ax, ay, az = a & 1, (a >> 1) & 1, a >> 2
            K = k - az
            if 0 <= K < nz:
                for b in range(8):
                    o = 9 * ((b >> 2) - az + 1) + 3 * (((b >> 1) & 1) - ay + 1) + (b & 1) - ax + 1
                    for j in range(ny):
                        _add(S[k, j + ay, o][ax : ax + nx], E[K, j, 8 * a + b])


@njit(fastmath=_FAST)
def _gather(y, s, v):
    for i in range(y.size):
        y[i] += s[i] * v[i]


@njit(parallel=True, cache=True)
def apply_stencil_scalar(S, u, y):
    """Set y <- S u on node fields [nk, nj, ni]."""
    nk, nj, ni = u.shape
    for k in prange(nk):
        for j in range(nj):
            y[k, j][:] = 0
            for o in range(27):
                kk = k + o // 9 - 1
                jj = j + o // 3 % 3 - 1
                di = o % 3 - 1
                if 0 <= kk < nk and 0 <= jj < nj:
                    lo = 1 if di < 0 else 0
                    hi = ni - 1 if di > 0 else ni
                    _gather(y[k, j][lo:hi], S[k, j, o][lo:hi], u[kk, jj][lo + di : hi + di])

"""Exact coarse operators of a scalar field, as 27-point stencils: the Galerkin products P^T A P.

Element matrices lie as E[K, J, 8 a + b, I] for corners a, b of coarse voxel (I, J, K), so that
loops run along x. The interpolation from the corners of a coarse voxel to those of its child t is
P[t], [8, 8].
"""

import numpy as np
from numba import njit, prange

_FAST = {"reassoc", "contract", "nsz"}


@njit(fastmath=_FAST)
def _plain_children(k, c, row, PK, PC, E):
    """Add the children of one row of coarse voxels that no held node or surface touches."""
    for ab in range(64):
        pk, pc = PK[ab], PC[ab]
        out = E[ab]
        for n in range(row):
            out[n] += pk * k[n] + pc * c[n]


@njit(fastmath=_FAST)
def _special_child(k, c, held, extra, K0, C0, P, A, AP, E, n):
    """Add one child some of whose nodes are held or have an entry on the diagonal."""
    for a in range(8):
        for b in range(8):
            A[a, b] = 0.0 if held[a] or held[b] else k * K0[a, b] + c * C0[a, b]
        if not held[a]:
            A[a, a] += extra[a]
    for a in range(8):
        for b in range(8):
            s = 0.0
            for m in range(8):
                s += A[a, m] * P[m, b]
            AP[a, b] = s
    for a in range(8):
        for b in range(8):
            s = 0.0
            for m in range(8):
                s += P[m, a] * AP[m, b]
            E[8 * a + b, n] += s


@njit(fastmath=_FAST)
def _from_voxels(cond, cap, special, held, extra, K0, C0, P, PK, PC, E, K, J):
    nz, ny, nx = cond.shape
    row = E.shape[3]
    k, c = np.empty(row), np.empty(row)
    A, AP = np.empty((8, 8)), np.empty((8, 8))
    h, e = np.empty(8, np.bool_), np.empty(8)
    acc = np.zeros((64, row))
    for t in range(8):
        z, y, x = 2 * K + (t >> 2), 2 * J + ((t >> 1) & 1), t & 1
        if z >= nz or y >= ny:
            continue
        k[:] = 0.0
        c[:] = 0.0
        for n in range((nx - x + 1) // 2):
            i = 2 * n + x
            if special[z, y, i]:
                for a in range(8):
                    kk, jj, ii = z + (a >> 2), y + ((a >> 1) & 1), i + (a & 1)
                    h[a] = held[kk, jj, ii]
                    e[a] = extra[kk, jj, ii]
                _special_child(cond[z, y, i], cap[z, y, i], h, e, K0, C0, P[t], A, AP, acc, n)
            else:
                k[n] = cond[z, y, i]
                c[n] = cap[z, y, i]
        _plain_children(k, c, row, PK[t], PC[t], acc)
    E[K, J] = acc


@njit(parallel=True, cache=True)
def elements_from_voxels(cond, cap, special, held, extra, K0, C0, P, PK, PC, E):
    """Set E <- element matrices of the first coarse level.

    cond, cap [nz, ny, nx] multiply the element matrices K0 and C0 [8, 8]; PK, PC [8, 64] are
    P[t]^T K0 P[t] and P[t]^T C0 P[t]. held [nz+1, ny+1, nx+1] marks nodes without an unknown,
    extra of the same shape is a diagonal matrix divided by the voxels of the grid round each node;
    special marks the voxels that have a held node or an extra.
    """
    for K in prange(E.shape[0]):
        for J in range(E.shape[1]):
            _from_voxels(cond, cap, special, held, extra, K0, C0, P, PK, PC, E, K, J)


@njit(fastmath=_FAST)
def _add_strided(out, fine, x, w):
    for n in range((fine.size - x + 1) // 2):
        out[n] += w * fine[2 * n + x]


@njit(parallel=True, cache=True)
def elements_from_elements(F, entries, weights, E):
    """Set E <- element matrices one level below those of F.

    entries[t, n] holds (entry of E, entry of F) and weights[t, n] what the second adds to the
    first for child t; weights of 0 end the list of a child.
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

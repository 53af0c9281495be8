"""Trilinear transfer between a grid of nodes and the grid with twice the spacing."""

import numpy as np
from numba import njit, prange

_FAST = {"reassoc", "contract", "nsz"}


@njit(fastmath=_FAST)
def _add_row(t, r, w):
    for i in range(r.size):
        t[i] += w * r[i]


@njit(fastmath=_FAST)
def _restrict_plane(f, c, d, K):
    _, nk, nj, ni = f.shape
    half = f.dtype.type(0.5)
    t = np.empty(ni + 2, f.dtype)
    for J in range(c.shape[2]):
        t[:] = 0
        for dk in range(-1, 2):
            k = 2 * K + dk
            for dj in range(-1, 2):
                j = 2 * J + dj
                if 0 <= k < nk and 0 <= j < nj:
                    w = half if dk != 0 else half + half
                    if dj != 0:
                        w *= half
                    _add_row(t[1 : ni + 1], f[d, k, j], w)
        row = c[d, K, J]
        for i in range(row.size):
            p = 2 * i + 1
            v = half * t[p - 1]
            if p <= ni:
                v += t[p]
            if p + 1 <= ni:
                v += half * t[p + 1]
            row[i] = v


@njit(parallel=True, cache=True)
def restrict(f, c):
    """Set c <- P^T f, with P the trilinear interpolation from the coarse nodes c to the fine f."""
    planes = c.shape[1]
    for n in prange(3 * planes):
        _restrict_plane(f, c, n // planes, n % planes)


@njit(fastmath=_FAST)
def _coarse_row(c, t, d, k, j):
    """Interpolate along z and y to the fine row (k, j)."""
    half = t.dtype.type(0.5)
    K = k >> 1
    J = j >> 1
    a = c[d, K, J]
    b = c[d, K, J + (j & 1)]
    e = c[d, K + (k & 1), J]
    g = c[d, K + (k & 1), J + (j & 1)]
    for i in range(a.size):
        t[i] = half * half * (a[i] + b[i] + e[i] + g[i])


@njit(fastmath=_FAST)
def _prolong_plane(c, f, B, d, k):
    ni = f.shape[3]
    half = f.dtype.type(0.5)
    t = np.zeros(c.shape[3] + 1, f.dtype)
    for j in range(f.shape[2]):
        _coarse_row(c, t, d, k, j)
        row = f[d, k, j]
        mask = B[d, k, j]
        for i in range(ni >> 1):
            row[2 * i] += t[i]
            row[2 * i + 1] += half * (t[i] + t[i + 1])
        if ni & 1:
            row[ni - 1] += t[ni >> 1]
        for i in range(ni):
            row[i] = row[i] if mask[i] > 0 else row[i] * 0


@njit(parallel=True, cache=True)
def prolong_add(c, f, B):
    """Set f <- f + P c, and 0 where the nodal blocks B of the fine grid have no unknown."""
    planes = f.shape[1]
    for n in prange(3 * planes):
        _prolong_plane(c, f, B, n // planes, n % planes)

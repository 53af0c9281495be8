"""Conduction and capacity times temperature on a voxel grid, without a matrix.

The element matrices of a box of trilinear shape functions are exactly diagonal in the sums and
differences of its corner values (a Walsh-Hadamard transform): conduction, consistent capacity
and lumped capacity alike, whatever the aspect. Sums along x and z of one row of nodes serve the
voxels on both sides of it and are carried from row to row.
"""

import numpy as np
from numba import njit, prange

# Row temporaries of a width known at compile time keep the loops vector code; see the operator
# of the displacements.
WIDTH = 136
BLOCK = WIDTH - 8

_FAST = {"reassoc", "contract", "nsz"}


@njit(inline="always", fastmath=_FAST)
def _corner_sums(a0, a1, b0, b1):
    """Sums and differences of one row of nodes of a voxel: (sum, x, z, xz)."""
    s0 = a0 + a1
    d0 = a1 - a0
    s1 = b0 + b1
    d1 = b1 - b0
    return s0 + s1, d0 + d1, s1 - s0, d1 - d0


@njit(inline="always", fastmath=_FAST)
def _outgoing(T, i, o0, o1, o2, o3):
    """Heat at the four nodes of a voxel's row: low and high x, low and high z."""
    ls = o0 - o2
    ld = o1 - o3
    us = o0 + o2
    ud = o1 + o3
    T[8, i] = ls - ld
    T[9, i + 1] = ls + ld
    T[10, i] = us - ud
    T[11, i + 1] = us + ud


@njit(inline="always", fastmath=_FAST)
def _start_row(T, u, k, x0, w):
    a = u[k, 0][x0 : x0 + w + 1]
    b = u[k + 1, 0][x0 : x0 + w + 1]
    for i in range(w):
        s, dx, dz, dxz = _corner_sums(a[i], a[i + 1], b[i], b[i + 1])
        T[0, i] = s
        T[1, i] = dx
        T[2, i] = dz
        T[3, i] = dxz
        T[4, i] = 0
        T[5, i] = 0
        T[6, i] = 0
        T[7, i] = 0


@njit(inline="always", fastmath=_FAST)
def _row_of_voxels(T, u, cond, cap, p, q, k, j, x0, w):
    """Temperatures to heat for one row of voxels; finishes its lower row of nodes."""
    a = u[k, j + 1][x0 : x0 + w + 1]
    b = u[k + 1, j + 1][x0 : x0 + w + 1]
    kk = cond[k, j][x0 : x0 + w]
    cc = cap[k, j][x0 : x0 + w]
    p1, p2, p3, p4, p5, p6, p7 = p
    q0, q1, q2, q3, q4, q5, q6, q7 = q
    for i in range(w):
        s, dx, dz, dxz = _corner_sums(a[i], a[i + 1], b[i], b[i + 1])
        ps = T[0, i]
        px = T[1, i]
        pz = T[2, i]
        pxz = T[3, i]
        T[0, i] = s
        T[1, i] = dx
        T[2, i] = dz
        T[3, i] = dxz
        m = kk[i]
        c = cc[i]
        mean = q0 * c * (s + ps)
        x = (p1 * m + q1 * c) * (dx + px)
        y = (p2 * m + q2 * c) * (s - ps)
        xy = (p3 * m + q3 * c) * (dx - px)
        z = (p4 * m + q4 * c) * (dz + pz)
        xz = (p5 * m + q5 * c) * (dxz + pxz)
        yz = (p6 * m + q6 * c) * (dz - pz)
        xyz = (p7 * m + q7 * c) * (dxz - pxz)
        o0 = T[4, i] + mean - y
        o1 = T[5, i] + x - xy
        o2 = T[6, i] + z - yz
        o3 = T[7, i] + xz - xyz
        T[4, i] = mean + y
        T[5, i] = x + xy
        T[6, i] = z + yz
        T[7, i] = xz + xyz
        _outgoing(T, i, o0, o1, o2, o3)


@njit(inline="always", fastmath=_FAST)
def _lower_nodes(T, row, x0, w, first):
    """Add a row's heat to its lower nodes, which the slab below has already visited."""
    if first:
        if x0 > 0:
            T[8, 0] += row[0]
        for i in range(w):
            row[i] = T[8, i] + T[9, i]
        row[w] = T[9, w]
    else:
        for i in range(w):
            row[i] += T[8, i] + T[9, i]
        row[w] += T[9, w]


@njit(inline="always", fastmath=_FAST)
def _upper_nodes(T, row, x0, w):
    """Write a row's heat to its upper nodes, which nothing has visited yet."""
    if x0 > 0:
        T[10, 0] += row[0]
    for i in range(w):
        row[i] = T[10, i] + T[11, i]
    row[w] = T[11, w]


@njit(fastmath=_FAST, error_model="numpy")
def _planes(u, cond, cap, y, p, q, lo, hi):
    """The product on the node planes lo to hi - 1."""
    nz, ny, nx = cond.shape
    # Scalars, because a load from an array inside the loops would keep them from vector code.
    ps = (p[1], p[2], p[3], p[4], p[5], p[6], p[7])
    qs = (q[0], q[1], q[2], q[3], q[4], q[5], q[6], q[7])
    T = np.empty((12, WIDTH), u.dtype)
    for r in range(8, 12):
        T[r, 0] = 0
    for k in range(max(lo - 1, 0), min(hi, nz)):
        for x0 in range(0, nx, BLOCK):
            w = min(BLOCK, nx - x0)
            _start_row(T, u, k, x0, w)
            for j in range(ny + 1):
                if j < ny:
                    _row_of_voxels(T, u, cond, cap, ps, qs, k, j, x0, w)
                else:
                    for i in range(w):
                        _outgoing(T, i, T[4, i], T[5, i], T[6, i], T[7, i])
                if k >= lo:
                    _lower_nodes(T, y[k, j][x0 : x0 + w + 1], x0, w, k == 0)
                if k + 1 < hi:
                    _upper_nodes(T, y[k + 1, j][x0 : x0 + w + 1], x0, w)


@njit(parallel=True, cache=True)
def apply_scalar(u, cond, cap, y, p, q, chunks):
    """Write the product of the matrix of H^T (cond p + cap q) H of every voxel with u to y.

    u, y are [nz+1, ny+1, nx+1], cond, cap [nz, ny, nx], p and q [8] the factors of the modes of a
    voxel (mode m varies along x, y, z where bits 0, 1, 2 of m are set; p[0] must be 0), all of one
    float type. Each thread owns a range of node planes and computes one slab of voxels twice, so
    every node is summed in the same order whatever the number of threads.
    """
    planes = u.shape[0]
    for t in prange(chunks):
        _planes(u, cond, cap, y, p, q, t * planes // chunks, (t + 1) * planes // chunks)


@njit(fastmath=_FAST)
def _step(b, y, B, x, d, a, c, first):
    if first:
        for i in range(b.size):
            v = c * B[i] * b[i]
            d[i] = v
            x[i] = v
    else:
        for i in range(b.size):
            v = a * d[i] + c * B[i] * (b[i] - y[i])
            d[i] = v
            x[i] += v


@njit(parallel=True, cache=True)
def smooth_scalar(b, y, B, x, d, a, c, first):
    """Chebyshev step with the inverse diagonal B, on [planes, n] views, y = A x.

    d <- a d + c B (b - y), x <- x + d; where `first`, x is taken as 0 and y is not read.
    """
    for k in prange(b.shape[0]):
        _step(b[k], y[k], B[k], x[k], d[k], a, c, first)


@njit(fastmath=_FAST)
def _residual(b, y, B, r):
    for i in range(r.size):
        v = b[i] - y[i]
        r[i] = v if B[i] > 0 else r[i] * 0


@njit(parallel=True, cache=True)
def residual_scalar(b, y, B, r):
    """Set r <- b - y where B > 0, 0 elsewhere, on [planes, n] views; r may be y."""
    for k in prange(b.shape[0]):
        _residual(b[k], y[k], B[k], r[k])


@njit(fastmath=_FAST)
def _add_row(t, r, w):
    for i in range(r.size):
        t[i] += w * r[i]


@njit(fastmath=_FAST)
def _restrict_plane(f, c, K):
    nk, nj, ni = f.shape
    half = f.dtype.type(0.5)
    t = np.empty(ni + 2, f.dtype)
    for J in range(c.shape[1]):
        t[:] = 0
        for dk in range(-1, 2):
            for dj in range(-1, 2):
                k, j = 2 * K + dk, 2 * J + dj
                if 0 <= k < nk and 0 <= j < nj:
                    w = half if dk != 0 else half + half
                    if dj != 0:
                        w *= half
                    _add_row(t[1 : ni + 1], f[k, j], w)
        row = c[K, J]
        for i in range(row.size):
            p = 2 * i + 1
            v = half * t[p - 1]
            if p <= ni:
                v += t[p]
            if p + 1 <= ni:
                v += half * t[p + 1]
            row[i] = v


@njit(parallel=True, cache=True)
def restrict_scalar(f, c):
    """Set c <- P^T f, P the trilinear interpolation from the coarse nodes c to the fine f."""
    for K in prange(c.shape[0]):
        _restrict_plane(f, c, K)


@njit(fastmath=_FAST)
def _prolong_plane(c, f, B, k):
    ni = f.shape[2]
    half = f.dtype.type(0.5)
    t = np.zeros(c.shape[2] + 1, f.dtype)
    for j in range(f.shape[1]):
        K, J = k >> 1, j >> 1
        r0, r1 = c[K, J], c[K, J + (j & 1)]
        r2, r3 = c[K + (k & 1), J], c[K + (k & 1), J + (j & 1)]
        for i in range(r0.size):
            t[i] = half * half * (r0[i] + r1[i] + r2[i] + r3[i])
        row = f[k, j]
        mask = B[k, j]
        for i in range(ni >> 1):
            row[2 * i] += t[i]
            row[2 * i + 1] += half * (t[i] + t[i + 1])
        if ni & 1:
            row[ni - 1] += t[ni >> 1]
        for i in range(ni):
            row[i] = row[i] if mask[i] > 0 else row[i] * 0


@njit(parallel=True, cache=True)
def prolong_add_scalar(c, f, B):
    """Set f <- f + P c where B > 0, and 0 elsewhere."""
    for k in prange(f.shape[0]):
        _prolong_plane(c, f, B, k)

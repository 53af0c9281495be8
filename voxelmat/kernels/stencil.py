"""27-point block stencils: the exact coarse operators of the multigrid, as rows of numbers.

S[k, j, 9 o + 3 c + d, i] couples component c of node (i, j, k) with component d of its neighbour
o = 9 (dk + 1) + 3 (dj + 1) + (di + 1).
"""

from numba import njit, prange

_FAST = {"reassoc", "contract", "nsz"}


@njit(fastmath=_FAST)
def _gather(a, s0, s1, s2, v0, v1, v2):
    for i in range(a.size):
        a[i] += s0[i] * v0[i] + s1[i] * v1[i] + s2[i] * v2[i]


@njit(fastmath=_FAST)
def _stencil_plane(S, u, y, k):
    _, nk, nj, ni = u.shape
    for j in range(nj):
        for c in range(3):
            y[c, k, j][:] = 0
        for o in range(27):
            kk = k + o // 9 - 1
            jj = j + o // 3 % 3 - 1
            di = o % 3 - 1
            if 0 <= kk < nk and 0 <= jj < nj:
                lo = 1 if di < 0 else 0
                hi = ni - 1 if di > 0 else ni
                v0 = u[0, kk, jj][lo + di : hi + di]
                v1 = u[1, kk, jj][lo + di : hi + di]
                v2 = u[2, kk, jj][lo + di : hi + di]
                for c in range(3):
                    r = 9 * o + 3 * c
                    s0 = S[k, j, r][lo:hi]
                    s1 = S[k, j, r + 1][lo:hi]
                    s2 = S[k, j, r + 2][lo:hi]
                    _gather(y[c, k, j][lo:hi], s0, s1, s2, v0, v1, v2)


@njit(parallel=True, cache=True)
def apply_stencil(S, u, y):
    """Set y <- S u on node fields [3, nk, nj, ni]."""
    for k in prange(u.shape[1]):
        _stencil_plane(S, u, y, k)


@njit(cache=True, nogil=True, fastmath=_FAST)
def scatter_slab(S, E, k):
    """Add the element matrices E[24, 24, ny, nx] of voxel slab k to the stencils."""
    ny, nx = E.shape[2], E.shape[3]
    for a in range(8):
        ax, ay, az = a & 1, (a >> 1) & 1, a >> 2
        for b in range(8):
            o = 9 * ((b >> 2) - az + 1) + 3 * (((b >> 1) & 1) - ay + 1) + (b & 1) - ax + 1
            for j in range(ny):
                for c in range(3):
                    for d in range(3):
                        row = S[k + az, j + ay, 9 * o + 3 * c + d][ax : ax + nx]
                        e = E[3 * a + c, 3 * b + d, j]
                        for i in range(nx):
                            row[i] += e[i]

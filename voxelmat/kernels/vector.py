"""Vector work of conjugate gradients and of smoothing, with sums that do not depend on threads.

Vectors come as [planes, n] views; sums are taken plane by plane into `sums`, which the caller
adds up in order. Nodal 3x3 blocks B are [6, planes, n] (xx, yy, zz, xy, xz, yz) against vectors
[3, planes, n]; B is zero in the rows and columns of unknowns that do not exist.
"""

from numba import njit, prange

_FAST = {"reassoc", "contract", "nsz"}


@njit(fastmath=_FAST)
def _dot(a, b):
    s = 0.0
    for i in range(a.size):
        s += a[i] * b[i]
    return s


@njit(parallel=True, cache=True)
def plane_dots(a, b, sums):
    """sums[k] = a[k] . b[k]."""
    for k in prange(sums.size):
        sums[k] = _dot(a[k], b[k])


@njit(fastmath=_FAST)
def _direction(p, z, free, scale, beta):
    for i in range(p.size):
        p[i] = (scale * z[i] + beta * p[i]) * free[i]


@njit(parallel=True, cache=True)
def cg_direction(p, z, free, scale, beta):
    """Set p <- scale z + beta p, on free unknowns."""
    for k in prange(p.shape[0]):
        _direction(p[k], z[k], free[k], scale, beta)


@njit(fastmath=_FAST)
def _advance(x, r, p, q, free, alpha):
    s = 0.0
    for i in range(x.size):
        x[i] += alpha * p[i]
        v = (r[i] - alpha * q[i]) * free[i]
        r[i] = v
        s += v * v
    return s


@njit(parallel=True, cache=True)
def cg_advance(x, r, p, q, free, alpha, sums):
    """Set x <- x + alpha p and r <- r - alpha q; sums[k] = r[k] . r[k]."""
    for k in prange(sums.size):
        sums[k] = _advance(x[k], r[k], p[k], q[k], free[k], alpha)


@njit(fastmath=_FAST)
def _scaled(a, s, out):
    for i in range(a.size):
        out[i] = s * a[i]


@njit(parallel=True, cache=True)
def scaled_copy(a, s, out):
    """Set out <- s a, in the float type of out."""
    for k in prange(a.shape[0]):
        _scaled(a[k], s, out[k])


@njit(fastmath=_FAST)
def _add_product(d, x, y):
    for i in range(y.size):
        y[i] += d[i] * x[i]


@njit(parallel=True, cache=True)
def add_product(d, x, y):
    """Set y <- y + d x, entry by entry."""
    for k in prange(y.shape[0]):
        _add_product(d[k], x[k], y[k])


@njit(fastmath=_FAST)
def _smooth_first(b, B, x, d, c, k):
    b0, b1, b2 = b[0, k], b[1, k], b[2, k]
    xx, yy, zz = B[0, k], B[1, k], B[2, k]
    xy, xz, yz = B[3, k], B[4, k], B[5, k]
    x0, x1, x2 = x[0, k], x[1, k], x[2, k]
    d0, d1, d2 = d[0, k], d[1, k], d[2, k]
    for i in range(b0.size):
        v0 = c * (xx[i] * b0[i] + xy[i] * b1[i] + xz[i] * b2[i])
        v1 = c * (xy[i] * b0[i] + yy[i] * b1[i] + yz[i] * b2[i])
        v2 = c * (xz[i] * b0[i] + yz[i] * b1[i] + zz[i] * b2[i])
        d0[i] = v0
        d1[i] = v1
        d2[i] = v2
        x0[i] = v0
        x1[i] = v1
        x2[i] = v2


@njit(parallel=True, cache=True)
def smooth_first(b, B, x, d, c):
    """First Chebyshev step from zero: x <- d <- c B b."""
    for k in prange(b.shape[1]):
        _smooth_first(b, B, x, d, c, k)


@njit(fastmath=_FAST)
def _smooth_next(b, y, B, x, d, a, c, k):
    b0, b1, b2 = b[0, k], b[1, k], b[2, k]
    y0, y1, y2 = y[0, k], y[1, k], y[2, k]
    xx, yy, zz = B[0, k], B[1, k], B[2, k]
    xy, xz, yz = B[3, k], B[4, k], B[5, k]
    x0, x1, x2 = x[0, k], x[1, k], x[2, k]
    d0, d1, d2 = d[0, k], d[1, k], d[2, k]
    for i in range(b0.size):
        r0 = b0[i] - y0[i]
        r1 = b1[i] - y1[i]
        r2 = b2[i] - y2[i]
        v0 = a * d0[i] + c * (xx[i] * r0 + xy[i] * r1 + xz[i] * r2)
        v1 = a * d1[i] + c * (xy[i] * r0 + yy[i] * r1 + yz[i] * r2)
        v2 = a * d2[i] + c * (xz[i] * r0 + yz[i] * r1 + zz[i] * r2)
        d0[i] = v0
        d1[i] = v1
        d2[i] = v2
        x0[i] += v0
        x1[i] += v1
        x2[i] += v2


@njit(parallel=True, cache=True)
def smooth_next(b, y, B, x, d, a, c):
    """Further Chebyshev step, y = A x: d <- a d + c B (b - y), x <- x + d."""
    for k in prange(b.shape[1]):
        _smooth_next(b, y, B, x, d, a, c, k)


@njit(fastmath=_FAST)
def _residual(b, y, m, r):
    for i in range(r.size):
        v = b[i] - y[i]
        r[i] = v if m[i] > 0 else r[i] * 0


@njit(parallel=True, cache=True)
def residual(b, y, B, r):
    """Set r <- b - y on unknowns that exist, 0 elsewhere; r may be y."""
    for k in prange(b.shape[1]):
        for d in range(3):
            _residual(b[d, k], y[d, k], B[d, k], r[d, k])

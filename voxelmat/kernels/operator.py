"""Stiffness times displacement on a voxel grid, without a matrix.

Corner values of a voxel are turned into sums and differences along x, y, z (a Walsh-Hadamard
transform), in which the stiffness of a box element is almost diagonal; the material acts there
and the transform is its own way back. Sums along x and z of one row serve the voxels on both
sides of it, so they are carried from row to row.
"""

import numpy as np
from numba import njit, prange

# Row temporaries have a width known at compile time, so that their addresses are known and the
# loops over a row become vector code. 136 is 17 cache lines: rows do not fall on the same ways.
WIDTH = 136
BLOCK = WIDTH - 8

# Rows of the temporary: 12 carried sums, 12 carried forces, 12 outgoing forces.
SUMS, CARRY, OUT = 0, 12, 24

_FAST = {"reassoc", "contract", "arcp", "nsz"}


@njit(inline="always", fastmath=_FAST)
def _corner_sums(a0, a1, b0, b1):
    """Sums and differences of one row of nodes: (sum, x, z, xz)."""
    s0 = a0 + a1
    d0 = a1 - a0
    s1 = b0 + b1
    d1 = b1 - b0
    return s0 + s1, d0 + d1, s1 - s0, d1 - d0


@njit(inline="always", fastmath=_FAST)
def _modes(T, r, i, a0, a1, b0, b1):
    """The seven deforming modes (y, x, xy, z, yz, xz, xyz) of one component of a voxel."""
    s, dx, dz, dxz = _corner_sums(a0, a1, b0, b1)
    ps = T[r, i]
    px = T[r + 1, i]
    pz = T[r + 2, i]
    pxz = T[r + 3, i]
    T[r, i] = s
    T[r + 1, i] = dx
    T[r + 2, i] = dz
    T[r + 3, i] = dxz
    return s - ps, dx + px, dx - px, dz + pz, dz - pz, dxz + pxz, dxz - pxz


@njit(inline="always", fastmath=_FAST)
def _spread(T, r, i, f):
    """Turn modal forces back into forces on the two rows of nodes; finish the lower row."""
    y, x, xy, z, yz, xz, xyz = f
    b = CARRY + r
    o0 = T[b, i] - y
    o1 = T[b + 1, i] + x - xy
    o2 = T[b + 2, i] + z - yz
    o3 = T[b + 3, i] + xz - xyz
    T[b, i] = y
    T[b + 1, i] = x + xy
    T[b + 2, i] = z + yz
    T[b + 3, i] = xz + xyz
    _outgoing(T, r, i, o0, o1, o2, o3)


@njit(inline="always", fastmath=_FAST)
def _outgoing(T, r, i, o0, o1, o2, o3):
    """Forces on the four nodes of a voxel's row: low and high x, low and high z."""
    o = OUT + r
    ls = o0 - o2
    ld = o1 - o3
    us = o0 + o2
    ud = o1 + o3
    T[o, i] = ls - ld
    T[o + 1, i + 1] = ls + ld
    T[o + 2, i] = us - ud
    T[o + 3, i + 1] = us + ud


@njit(inline="always", fastmath=_FAST)
def _material(qx, qy, qz, lam, m, c):
    """Modal forces from modal displacements of a voxel with Lame constants lam, m."""
    x_y, x_x, x_xy, x_z, x_yz, x_xz, x_xyz = qx
    y_y, y_x, y_xy, y_z, y_yz, y_xz, y_xyz = qy
    z_y, z_x, z_xy, z_z, z_yz, z_xz, z_xyz = qz
    gx, gy, gz, third, ninth, tiny, s0, s1, s2, t0, t1, t2, kept = c
    m2 = m + m
    star = m2 * lam / (lam + m2 + tiny)
    ls = s0 * star + s1 * lam + s2 * m
    lb = t0 * star + t1 * lam + t2 * m
    shear = kept * m

    # Constant strains.
    ex = gx * x_x
    ey = gy * y_y
    ez = gz * z_z
    p = lam * (ex + ey + ez)
    sxy = m * (gy * x_y + gx * y_x)
    sxz = m * (gz * x_z + gx * z_x)
    syz = m * (gz * y_z + gy * z_y)

    # Shear that varies linearly: twist about x, y, z.
    tx = third * m * (gz * y_xz + gy * z_xy)
    ty = third * m * (gz * x_yz + gx * z_xy)
    tz = third * m * (gy * x_yz + gx * y_xz)

    # Normal strains that vary linearly: two along each axis.
    ax = third * gx
    ay = third * gy
    az = third * gz
    xa = gy * y_xy
    xb = gz * z_xz
    px = ls * (xa + xb)
    ya = gx * x_xy
    yb = gz * z_yz
    py = ls * (ya + yb)
    za = gx * x_xz
    zb = gy * y_yz
    pz = ls * (za + zb)

    # Parasitic shear of the bending modes (0 where the element drops it) and bilinear modes.
    hxx = shear * gx * gx
    hyy = shear * gy * gy
    hzz = shear * gz * gz
    bx = ninth * gx * gx
    by = ninth * gy * gy
    bz = ninth * gz * gz
    return (
        (
            gy * sxy,
            gx * (p + m2 * ex),
            ax * (py + m2 * ya) + hyy * x_xy,
            gz * sxz,
            gz * ty + gy * tz,
            ax * (pz + m2 * za) + hzz * x_xz,
            (lb * bx + m * (by + bz)) * x_xyz,
        ),
        (
            gy * (p + m2 * ey),
            gx * sxy,
            ay * (px + m2 * xa) + hxx * y_xy,
            gz * syz,
            ay * (pz + m2 * zb) + hzz * y_yz,
            gz * tx + gx * tz,
            (lb * by + m * (bx + bz)) * y_xyz,
        ),
        (
            gy * syz,
            gx * sxz,
            gy * tx + gx * ty,
            gz * (p + m2 * ez),
            az * (py + m2 * yb) + hyy * z_yz,
            az * (px + m2 * xb) + hxx * z_xz,
            (lb * bz + m * (bx + by)) * z_xyz,
        ),
    )


@njit(inline="always", fastmath=_FAST)
def _start_row(T, u, k, x0, w):
    """Sums of the first row of nodes; no force is carried into it."""
    for d in range(3):
        a = u[d, k, 0][x0 : x0 + w + 1]
        b = u[d, k + 1, 0][x0 : x0 + w + 1]
        r = 4 * d
        for i in range(w):
            s, dx, dz, dxz = _corner_sums(a[i], a[i + 1], b[i], b[i + 1])
            T[r, i] = s
            T[r + 1, i] = dx
            T[r + 2, i] = dz
            T[r + 3, i] = dxz
            T[CARRY + r, i] = 0
            T[CARRY + r + 1, i] = 0
            T[CARRY + r + 2, i] = 0
            T[CARRY + r + 3, i] = 0


@njit(inline="always", fastmath=_FAST)
def _lower_nodes(T, y, k, j, x0, w, first):
    """Add a row's forces to its lower nodes, which the slab below has already visited."""
    for d in range(3):
        o = OUT + 4 * d
        row = y[d, k, j][x0 : x0 + w + 1]
        if first:
            if x0 > 0:
                T[o, 0] += row[0]
            for i in range(w):
                row[i] = T[o, i] + T[o + 1, i]
            row[w] = T[o + 1, w]
        else:
            for i in range(w):
                row[i] += T[o, i] + T[o + 1, i]
            row[w] += T[o + 1, w]


@njit(inline="always", fastmath=_FAST)
def _upper_nodes(T, y, k, j, x0, w):
    """Write a row's forces to its upper nodes, which nothing has visited yet."""
    for d in range(3):
        o = OUT + 4 * d + 2
        row = y[d, k + 1, j][x0 : x0 + w + 1]
        if x0 > 0:
            T[o, 0] += row[0]
        for i in range(w):
            row[i] = T[o, i] + T[o + 1, i]
        row[w] = T[o + 1, w]


@njit(inline="always", fastmath=_FAST)
def _row_of_voxels(T, u, lam, mu, c, k, j, x0, w):
    """Displacements to forces for one row of voxels."""
    a0 = u[0, k, j + 1][x0 : x0 + w + 1]
    b0 = u[0, k + 1, j + 1][x0 : x0 + w + 1]
    a1 = u[1, k, j + 1][x0 : x0 + w + 1]
    b1 = u[1, k + 1, j + 1][x0 : x0 + w + 1]
    a2 = u[2, k, j + 1][x0 : x0 + w + 1]
    b2 = u[2, k + 1, j + 1][x0 : x0 + w + 1]
    ll = lam[k, j][x0 : x0 + w]
    mm = mu[k, j][x0 : x0 + w]
    for i in range(w):
        qx = _modes(T, 0, i, a0[i], a0[i + 1], b0[i], b0[i + 1])
        qy = _modes(T, 4, i, a1[i], a1[i + 1], b1[i], b1[i + 1])
        qz = _modes(T, 8, i, a2[i], a2[i + 1], b2[i], b2[i + 1])
        fx, fy, fz = _material(qx, qy, qz, ll[i], mm[i], c)
        _spread(T, 0, i, fx)
        _spread(T, 4, i, fy)
        _spread(T, 8, i, fz)


@njit(inline="always", fastmath=_FAST)
def _last_row(T, w):
    """Forces that the last row of voxels carries to the last row of nodes."""
    for d in range(3):
        r = CARRY + 4 * d
        for i in range(w):
            _outgoing(T, 4 * d, i, T[r, i], T[r + 1, i], T[r + 2, i], T[r + 3, i])


@njit(fastmath=_FAST, error_model="numpy")
def _planes(u, lam, mu, y, c, lo, hi):
    """K u on the node planes lo to hi - 1."""
    nz, ny, nx = lam.shape
    # Scalars, because a load from an array inside the loops would keep them from vector code.
    s = (c[0], c[1], c[2], c[3], c[4], c[5], c[6], c[7], c[8], c[9], c[10], c[11], c[12])
    T = np.empty((36, WIDTH), u.dtype)
    for r in range(OUT, 36):
        T[r, 0] = 0
    for k in range(max(lo - 1, 0), min(hi, nz)):
        for x0 in range(0, nx, BLOCK):
            w = min(BLOCK, nx - x0)
            _start_row(T, u, k, x0, w)
            for j in range(ny + 1):
                if j < ny:
                    _row_of_voxels(T, u, lam, mu, s, k, j, x0, w)
                else:
                    _last_row(T, w)
                if k >= lo:
                    _lower_nodes(T, y, k, j, x0, w, k == 0)
                if k + 1 < hi:
                    _upper_nodes(T, y, k, j, x0, w)


@njit(parallel=True, cache=True)
def apply_stiffness(u, lam, mu, y, c, chunks):
    """Write K u to y.

    u, y are [3, nz+1, ny+1, nx+1], lam, mu [nz, ny, nx], c the constants of the element, all of
    one float type. Each thread owns a range of node planes and computes one slab of voxels
    twice, so every node is summed in the same order whatever the number of threads.
    """
    planes = u.shape[1]
    for t in prange(chunks):
        _planes(u, lam, mu, y, c, t * planes // chunks, (t + 1) * planes // chunks)

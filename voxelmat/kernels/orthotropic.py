"""Stiffness of voxels with nine constants in the grid's axes: product, nodal blocks, energy.

As `voxelmat.kernels.operator`, whose sums and differences serve here too; but what the material
does to the modes of a voxel is looked up by the voxel's label, so that a voxel costs two bytes of
memory (and one more where some are partly filled) however many constants it has.

A table is [21, labels]: C11 C22 C33 C12 C13 C23 C44 C55 C66; what the modes see that vary
linearly along x (yy, zz, yz), along y (xx, zz, xz) and along z (xx, yy, xy); what the bilinear
modes of each component see. Voigt's numbers: 4 is yz, 5 is xz, 6 is xy.
"""

import numpy as np
from numba import njit, prange

from voxelmat.kernels.blocks import _invert
from voxelmat.kernels.forms import _modes as _scaled_modes
from voxelmat.kernels.operator import (
    BLOCK,
    OUT,
    WIDTH,
    _last_row,
    _lower_nodes,
    _modes,
    _spread,
    _start_row,
    _upper_nodes,
)

_FAST = {"reassoc", "contract", "arcp", "nsz"}

# Rows of the temporary after those of the sums and forces: the filled fraction, and (37 to 57) the
# constants of the voxels of a row. They are looked up in a loop of their own, since a look-up among
# the sums and differences would keep those from vector code (2 to 3 times slower).
_FILL, _TABLE, _ROWS = 36, 37, 58


@njit(inline="always", fastmath=_FAST)
def _material(qx, qy, qz, p, c, w):
    """Modal forces from modal displacements; p is a voxel's column of the table, w its fill."""
    x_y, x_x, x_xy, x_z, x_yz, x_xz, x_xyz = qx
    y_y, y_x, y_xy, y_z, y_yz, y_xz, y_xyz = qy
    z_y, z_x, z_xy, z_z, z_yz, z_xz, z_xyz = qz
    c11, c22, c33, c12, c13, c23, c44, c55, c66 = p[0]
    xyy, xzz, xyz, yxx, yzz, yxz, zxx, zyy, zxy = p[1]
    bxx, byy, bzz = p[2]
    gx, gy, gz, third, ninth, kept, _ = c

    # Constant strains.
    gx_w = w * gx
    gy_w = w * gy
    gz_w = w * gz
    ex = gx_w * x_x
    ey = gy_w * y_y
    ez = gz_w * z_z
    sxy = c66 * (gy_w * x_y + gx_w * y_x)
    sxz = c55 * (gz_w * x_z + gx_w * z_x)
    syz = c44 * (gz_w * y_z + gy_w * z_y)

    # Shear that varies linearly: twist about x, y, z.
    tx = third * c44 * (gz_w * y_xz + gy_w * z_xy)
    ty = third * c55 * (gz_w * x_yz + gx_w * z_xy)
    tz = third * c66 * (gy_w * x_yz + gx_w * y_xz)

    # Normal strains that vary linearly: two along each axis.
    ax = third * gx
    ay = third * gy
    az = third * gz
    xa = gy_w * y_xy
    xb = gz_w * z_xz
    ya = gx_w * x_xy
    yb = gz_w * z_yz
    za = gx_w * x_xz
    zb = gy_w * y_yz

    # Parasitic shear of the bending modes (0 where the element drops it) and bilinear modes.
    hx = kept * gx_w * gx
    hy = kept * gy_w * gy
    hz = kept * gz_w * gz
    bx = ninth * gx_w * gx
    by = ninth * gy_w * gy
    bz = ninth * gz_w * gz
    return (
        (
            gy * sxy,
            gx * (c11 * ex + c12 * ey + c13 * ez),
            ax * (yxx * ya + yxz * yb) + hy * c66 * x_xy,
            gz * sxz,
            gz * ty + gy * tz,
            ax * (zxx * za + zxy * zb) + hz * c55 * x_xz,
            (bxx * bx + c66 * by + c55 * bz) * x_xyz,
        ),
        (
            gy * (c12 * ex + c22 * ey + c23 * ez),
            gx * sxy,
            ay * (xyy * xa + xyz * xb) + hx * c66 * y_xy,
            gz * syz,
            ay * (zxy * za + zyy * zb) + hz * c44 * y_yz,
            gz * tx + gx * tz,
            (byy * by + c66 * bx + c44 * bz) * y_xyz,
        ),
        (
            gy * syz,
            gx * sxz,
            gy * tx + gx * ty,
            gz * (c13 * ex + c23 * ey + c33 * ez),
            az * (yxz * ya + yzz * yb) + hy * c44 * z_yz,
            az * (xyz * xa + xzz * xb) + hx * c55 * z_xz,
            (bzz * bz + c55 * bx + c44 * by) * z_xyz,
        ),
    )


@njit(inline="always", fastmath=_FAST)
def _look_up(T, last, label, table):
    """Set the rows of constants where a label is not that of the row before."""
    for i in range(label.size):
        n = label[i]
        if n != last[i]:
            last[i] = n
            for q in range(21):
                T[_TABLE + q, i] = table[n, q]


@njit(inline="always", fastmath=_FAST)
def _row_of_voxels(T, u, c, k, j, x0, w):
    """Displacements to forces for one row of voxels."""
    a0 = u[0, k, j + 1][x0 : x0 + w + 1]
    b0 = u[0, k + 1, j + 1][x0 : x0 + w + 1]
    a1 = u[1, k, j + 1][x0 : x0 + w + 1]
    b1 = u[1, k + 1, j + 1][x0 : x0 + w + 1]
    a2 = u[2, k, j + 1][x0 : x0 + w + 1]
    b2 = u[2, k + 1, j + 1][x0 : x0 + w + 1]
    for i in range(w):
        p = (
            (
                T[37, i], T[38, i], T[39, i], T[40, i], T[41, i], T[42, i], T[43, i], T[44, i],
                T[45, i],
            ),
            (
                T[46, i], T[47, i], T[48, i], T[49, i], T[50, i], T[51, i], T[52, i], T[53, i],
                T[54, i],
            ),
            (T[55, i], T[56, i], T[57, i]),
        )  # fmt: skip
        qx = _modes(T, 0, i, a0[i], a0[i + 1], b0[i], b0[i + 1])
        qy = _modes(T, 4, i, a1[i], a1[i + 1], b1[i], b1[i + 1])
        qz = _modes(T, 8, i, a2[i], a2[i + 1], b2[i], b2[i + 1])
        fx, fy, fz = _material(qx, qy, qz, p, c, T[_FILL, i])
        _spread(T, 0, i, fx)
        _spread(T, 4, i, fy)
        _spread(T, 8, i, fz)


@njit(fastmath=_FAST, error_model="numpy")
def _planes(u, labels, fill, table, y, c, lo, hi):
    """K u on the node planes lo to hi - 1."""
    nz, ny, nx = labels.shape
    # Scalars, because a load from an array inside the loops would keep them from vector code.
    s = (c[0], c[1], c[2], c[3], c[4], c[5], c[6])
    T = np.empty((_ROWS, WIDTH), u.dtype)
    T[_FILL] = 1
    columns = table.T.copy()
    last = np.empty(WIDTH, np.uint16)
    last[:] = labels[0, 0, 0]
    for r in range(_TABLE, _ROWS):
        T[r] = table[r - _TABLE, labels[0, 0, 0]]
    for r in range(OUT, _FILL):
        T[r, 0] = 0
    for k in range(max(lo - 1, 0), min(hi, nz)):
        for x0 in range(0, nx, BLOCK):
            w = min(BLOCK, nx - x0)
            _start_row(T, u, k, x0, w)
            for j in range(ny + 1):
                if j < ny:
                    _look_up(T, last, labels[k, j][x0 : x0 + w], columns)
                    if fill.size > 0:
                        share = fill[k, j][x0 : x0 + w]
                        for i in range(w):
                            T[_FILL, i] = share[i] * s[6]
                    _row_of_voxels(T, u, s, k, j, x0, w)
                else:
                    _last_row(T, w)
                if k >= lo:
                    _lower_nodes(T, y, k, j, x0, w, k == 0)
                if k + 1 < hi:
                    _upper_nodes(T, y, k, j, x0, w)


@njit(parallel=True, cache=True)
def apply_orthotropic(u, labels, fill, table, y, c, chunks):
    """Write K u to y.

    u, y are [3, nz+1, ny+1, nx+1]; labels [nz, ny, nx] of uint16; fill the same of uint8 (255 is
    full), or without entries where all are full; table [21, labels]; c the constants gx, gy, gz,
    1/3, 1/9, kept / 3, 1/255 of the element. Floats are of one type. Threads own planes of nodes,
    so every node is summed in the same order whatever their number.
    """
    planes = u.shape[1]
    for t in prange(chunks):
        _planes(u, labels, fill, table, y, c, t * planes // chunks, (t + 1) * planes // chunks)


@njit(error_model="numpy")
def _inverse_plane(labels, fill, springs, corners, free, B, k):
    nz, ny, nx = labels.shape
    row = np.empty((6, nx + 1))
    for j in range(ny + 1):
        row[:] = 0.0
        for a in range(8):
            kk = k - (a >> 2)
            jj = j - ((a >> 1) & 1)
            if 0 <= kk < nz and 0 <= jj < ny:
                x = a & 1
                for i in range(nx):
                    share = fill[kk, jj, i] / 255.0 if fill.size > 0 else 1.0
                    n = labels[kk, jj, i]
                    for e in range(6):
                        row[e, i + x] += share * corners[n, a, e]
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
def orthotropic_inverses(labels, fill, springs, corners, free, B):
    """Set B <- inverse nodal blocks as `voxelmat.kernels.blocks.voxel_inverses` does.

    corners[labels, 8, 6] are the entries xx, yy, zz, xy, xz, yz of each label's corner blocks.
    """
    for k in prange(B.shape[1]):
        _inverse_plane(labels, fill, springs, corners, free, B, k)


@njit(fastmath=_FAST)
def _energy(A, p, gx, gy, gz, kept):
    """Twice the strain energy of a voxel with the modes A[3, 8] and the constants p[21]."""
    ex, ey, ez = gx * A[0, 1], gy * A[1, 2], gz * A[2, 4]
    out = p[0] * ex * ex + p[1] * ey * ey + p[2] * ez * ez
    out += 2.0 * (p[3] * ex * ey + p[4] * ex * ez + p[5] * ey * ez)
    out += p[6] * (gz * A[1, 4] + gy * A[2, 2]) ** 2
    out += p[7] * (gz * A[0, 4] + gx * A[2, 1]) ** 2
    out += p[8] * (gy * A[0, 2] + gx * A[1, 1]) ** 2
    xa, xb = gy * A[1, 3], gz * A[2, 5]
    ya, yb = gx * A[0, 3], gz * A[2, 6]
    za, zb = gx * A[0, 5], gy * A[1, 6]
    lin = p[9] * xa * xa + p[10] * xb * xb + 2.0 * p[11] * xa * xb
    lin += p[12] * ya * ya + p[13] * yb * yb + 2.0 * p[14] * ya * yb
    lin += p[15] * za * za + p[16] * zb * zb + 2.0 * p[17] * za * zb
    lin += p[6] * (gz * A[1, 5] + gy * A[2, 3]) ** 2
    lin += p[7] * (gz * A[0, 6] + gx * A[2, 3]) ** 2
    lin += p[8] * (gy * A[0, 6] + gx * A[1, 5]) ** 2
    out += lin / 3.0
    xx, yy, zz = gx * gx, gy * gy, gz * gz
    par = p[8] * (yy * A[0, 3] ** 2 + xx * A[1, 3] ** 2)
    par += p[7] * (zz * A[0, 5] ** 2 + xx * A[2, 5] ** 2)
    par += p[6] * (zz * A[1, 6] ** 2 + yy * A[2, 6] ** 2)
    bil = (p[18] * xx + p[8] * yy + p[7] * zz) * A[0, 7] ** 2
    bil += (p[19] * yy + p[8] * xx + p[6] * zz) * A[1, 7] ** 2
    bil += (p[20] * zz + p[7] * xx + p[6] * yy) * A[2, 7] ** 2
    return out + kept * par + bil / 9.0


@njit(fastmath=_FAST, error_model="numpy")
def _energy_plane(u, labels, fill, table, c, out, k):
    A = np.empty((3, 8))
    for j in range(labels.shape[1]):
        for i in range(labels.shape[2]):
            _scaled_modes(u, k, j, i, c, A)
            p = table[:, labels[k, j, i]]
            share = fill[k, j, i] / 255.0 if fill.size > 0 else 1.0
            out[k, j, i] = share * _energy(A, p, c[0], c[1], c[2], c[5])


@njit(parallel=True, cache=True)
def orthotropic_energy(u, labels, fill, table, c, out):
    """out[nz, ny, nx] <- u . K u of each voxel, twice its strain energy."""
    for k in prange(labels.shape[0]):
        _energy_plane(u, labels, fill, table, c, out, k)

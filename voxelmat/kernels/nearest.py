"""Signed distance from voxel centres to the nearest triangle, by a tree of thick discs."""

import math

import numpy as np
from numba import njit, prange


@njit(cache=True, nogil=True)
def _fit(corners, first, last, slack, disc):
    """Thick disc round the triangles `first` to `last`, along their mean normal."""
    nx, ny, nz = 0.0, 0.0, 0.0
    low = np.full(3, np.inf)
    high = np.full(3, -np.inf)
    for t in range(first, last):
        a, b, c = corners[t, 0], corners[t, 1], corners[t, 2]
        ux, uy, uz = b[0] - a[0], b[1] - a[1], b[2] - a[2]
        vx, vy, vz = c[0] - a[0], c[1] - a[1], c[2] - a[2]
        nx += uy * vz - uz * vy
        ny += uz * vx - ux * vz
        nz += ux * vy - uy * vx
        for d in range(3):
            low[d] = min(low[d], min(a[d], min(b[d], c[d])))
            high[d] = max(high[d], max(a[d], max(b[d], c[d])))
    length = math.sqrt(nx * nx + ny * ny + nz * nz)
    if length > 0.0:
        nx, ny, nz = nx / length, ny / length, nz / length
    else:
        nx, ny, nz = 1.0, 0.0, 0.0  # the two sides of a sheet: any direction will do
    mx, my, mz = 0.5 * (low[0] + high[0]), 0.5 * (low[1] + high[1]), 0.5 * (low[2] + high[2])
    least, most, wide = np.inf, -np.inf, 0.0
    for t in range(first, last):
        for p in range(3):
            x, y, z = corners[t, p, 0] - mx, corners[t, p, 1] - my, corners[t, p, 2] - mz
            along = x * nx + y * ny + z * nz
            least = min(least, along)
            most = max(most, along)
            wide = max(wide, x * x + y * y + z * z - along * along)
    middle = 0.5 * (least + most)
    disc[0], disc[1], disc[2] = mx + middle * nx, my + middle * ny, mz + middle * nz
    disc[3], disc[4], disc[5] = nx, ny, nz
    disc[6] = 0.5 * (most - least) + slack
    disc[7] = math.sqrt(wide) + slack


@njit(cache=True, nogil=True)
def fit_discs(corners, leaves, leaf, slack, discs):
    """Thick discs round all nodes of a complete binary tree.

    Parameters
    ----------
    corners : (m, 3, 3) float64
        Triangle corners in tree order.
    leaves, leaf : int
        Leaves of the tree, triangles a leaf.
    slack : float
        Added to thickness and radius against rounding.
    discs : (2 * leaves - 1, 8) float64
        Filled; see `signed_distance`. Nodes that hold nothing are put far away.
    """
    m = corners.shape[0]
    width = leaves
    size = leaf
    while width >= 1:
        for n in range(width):
            disc = discs[width - 1 + n]
            first = n * size
            if first < m:
                _fit(corners, first, min(first + size, m), slack, disc)
            else:
                disc[:] = 0.0
                disc[0] = 1e100
                disc[3] = 1.0
        width //= 2
        size *= 2


@njit(cache=True, nogil=True, error_model="numpy")
def _to_triangle(tri, px, py, pz):
    """Squared distance from a point to a triangle (Ericson 2005, Real-Time Collision
    Detection, section 5.1.5: the seven Voronoi regions of a triangle).
    """
    ax, ay, az = px - tri[0], py - tri[1], pz - tri[2]
    ux, uy, uz = tri[3], tri[4], tri[5]
    vx, vy, vz = tri[6], tri[7], tri[8]
    d1 = ux * ax + uy * ay + uz * az
    d2 = vx * ax + vy * ay + vz * az
    if d1 <= 0.0 and d2 <= 0.0:
        return ax * ax + ay * ay + az * az
    uu, uv, vv = tri[9], tri[10], tri[11]
    d3, d4 = d1 - uu, d2 - uv
    if d3 >= 0.0 and d4 <= d3:
        s, t = 1.0, 0.0
    else:
        d5, d6 = d1 - uv, d2 - vv
        vc = d1 * d4 - d3 * d2
        vb = d5 * d2 - d1 * d6
        va = d3 * d6 - d5 * d4
        if d6 >= 0.0 and d5 <= d6:
            s, t = 0.0, 1.0
        elif vc <= 0.0 and d1 >= 0.0 and d3 <= 0.0:
            s, t = d1 / (d1 - d3), 0.0
        elif vb <= 0.0 and d2 >= 0.0 and d6 <= 0.0:
            s, t = 0.0, d2 / (d2 - d6)
        elif va <= 0.0 and d4 - d3 >= 0.0 and d5 - d6 >= 0.0:
            t = (d4 - d3) / ((d4 - d3) + (d5 - d6))
            s = 1.0 - t
        else:
            total = va + vb + vc
            s, t = vb / total, vc / total
    qx = ax - s * ux - t * vx
    qy = ay - s * uy - t * vy
    qz = az - s * uz - t * vz
    return qx * qx + qy * qy + qz * qz


@njit(cache=True, nogil=True, error_model="numpy")
def _to_disc(disc, px, py, pz):
    """Squared distance to a thick disc: centre, axis, half thickness, radius."""
    x, y, z = px - disc[0], py - disc[1], pz - disc[2]
    along = x * disc[3] + y * disc[4] + z * disc[5]
    across = math.sqrt(max(x * x + y * y + z * z - along * along, 0.0))
    high = max(abs(along) - disc[6], 0.0)
    wide = max(across - disc[7], 0.0)
    return high * high + wide * wide


@njit(cache=True, nogil=True, error_model="numpy")
def _nearest(discs, triangles, leaf, px, py, pz, slack, bound, guess, stack, reach):
    """Squared distance to the nearest triangle, at most `slack` times too large and cut
    off at `bound`, and the triangle's number; `guess` is a triangle to begin with.
    """
    best = guess
    least = min(bound, _to_triangle(triangles[best], px, py, pz))
    leaves = (discs.shape[0] + 1) // 2
    top = 1
    stack[0] = 0
    reach[0] = _to_disc(discs[0], px, py, pz)
    while top > 0:
        top -= 1
        if reach[top] * slack >= least:
            continue
        node = stack[top]
        if node >= leaves - 1:
            first = (node - leaves + 1) * leaf
            for t in range(first, min(first + leaf, triangles.shape[0])):
                d = _to_triangle(triangles[t], px, py, pz)
                if d < least:
                    least = d
                    best = t
            continue
        a, b = 2 * node + 1, 2 * node + 2
        da = _to_disc(discs[a], px, py, pz)
        db = _to_disc(discs[b], px, py, pz)
        if da < db:
            a, b, da, db = b, a, db, da
        if da * slack < least:
            stack[top] = a
            reach[top] = da
            top += 1
        if db * slack < least:
            stack[top] = b
            reach[top] = db
            top += 1
    return least, best


@njit(cache=True, parallel=True, error_model="numpy")
def signed_distance(discs, triangles, leaf, pitch, winding, distance):
    """True distance in a narrow band, negative where the winding number is positive.

    Parameters
    ----------
    discs : (2 * leaves - 1, 8) float64
        Thick discs (centre, axis, half thickness, radius) round the triangles below each
        node of a complete binary tree, root first; leaf number l holds triangles
        ``l * leaf`` to ``(l + 1) * leaf``.
    triangles : (m, 12) float64
        Corner, two edges, and the edges' products uu, uv, vv, in tree order. Lengths are
        in units of the smallest spacing, with the low corner of the grid at 0.
    leaf : int
        Triangles a leaf.
    pitch : (3,) float64
        Spacing along x, y, z in the same unit.
    winding : (nz, ny, nx) int8
    distance : (nz, ny, nx) int8
        Filled: sixteenths of the smallest spacing, clipped to +-127.
    """
    nz, ny, nx = distance.shape
    hx, hy, hz = pitch[0], pitch[1], pitch[2]
    band = 127.0 / 16.0
    bound = (band + 4.0 * hx) ** 2
    for k in prange(nz):
        stack = np.empty(64, np.int32)
        reach = np.empty(64)
        z = (k + 0.5) * hz
        for j in range(ny):
            y = (j + 0.5) * hy
            guess = 0
            far = True
            i = 0
            while i < nx:
                x = (i + 0.5) * hx
                least = 0.0
                if far:
                    # Far off, half the distance is enough to know how far to walk.
                    least, guess = _nearest(
                        discs, triangles, leaf, x, y, z, 4.0, np.inf, guess, stack, reach
                    )
                    least *= 0.25
                if least < bound:
                    least, guess = _nearest(
                        discs, triangles, leaf, x, y, z, 1.0, bound, guess, stack, reach
                    )
                far = least >= bound
                d = math.sqrt(least)
                if d < band:
                    q = int(16.0 * d + 0.5)
                    distance[k, j, i] = -q if winding[k, j, i] > 0 else q
                    i += 1
                    continue
                # The surface comes no nearer than d less the way walked.
                last = min(nx - 1, i + int((d - band) / hx))
                while i <= last:
                    distance[k, j, i] = -127 if winding[k, j, i] > 0 else 127
                    i += 1

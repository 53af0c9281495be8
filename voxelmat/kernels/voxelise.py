"""Solid fraction of voxels (exact) and winding number at voxel centres (exact integer tests)."""

import math

import numpy as np
from numba import njit


@njit(cache=True, nogil=True)
def bin_by_plane(corners, n_planes):
    """Which triangles touch which plane of voxels.

    Parameters
    ----------
    corners : (m, 3, 3) float64
        Triangle corners in voxel units, x y z.
    n_planes : int
        Voxels along z.

    Returns
    -------
    start : (n_planes + 1,) int64
    member : int32
        Triangles of plane k: ``member[start[k]:start[k + 1]]``, in rising order.
    """
    m = corners.shape[0]
    first = np.empty(m, np.int32)
    last = np.empty(m, np.int32)
    start = np.zeros(n_planes + 1, np.int64)
    for t in range(m):
        z0, z1, z2 = corners[t, 0, 2], corners[t, 1, 2], corners[t, 2, 2]
        low = math.floor(min(z0, min(z1, z2)))
        high = math.floor(max(z0, max(z1, z2)))
        first[t] = min(max(low, 0.0), float(n_planes))
        last[t] = max(min(high, n_planes - 1.0), -1.0)
        for k in range(first[t], last[t] + 1):
            start[k + 1] += 1
    for k in range(n_planes):
        start[k + 1] += start[k]
    fill = start[:-1].copy()
    member = np.empty(start[n_planes], np.int32)
    for t in range(m):
        for k in range(first[t], last[t] + 1):
            member[fill[k]] = t
            fill[k] += 1
    return start, member


@njit(cache=True, nogil=True)
def _cut(poly, n, axis, value, low, high):
    """Cut a convex polygon at ``axis = value``; both halves share the new corners."""
    n_low = 0
    n_high = 0
    for a in range(n):
        b = a + 1 if a + 1 < n else 0
        da = poly[a, axis] - value
        db = poly[b, axis] - value
        if da <= 0.0:
            for c in range(3):
                low[n_low, c] = poly[a, c]
            n_low += 1
        if da >= 0.0:
            for c in range(3):
                high[n_high, c] = poly[a, c]
            n_high += 1
        if (da < 0.0 < db) or (db < 0.0 < da):
            s = da / (da - db)
            for c in range(3):
                x = poly[a, c] + s * (poly[b, c] - poly[a, c])
                low[n_low, c] = x
                high[n_high, c] = x
            low[n_low, axis] = value
            high[n_high, axis] = value
            n_low += 1
            n_high += 1
    return n_low, n_high


@njit(cache=True, nogil=True)
def _span(poly, n, axis):
    low = poly[0, axis]
    high = low
    for a in range(1, n):
        low = min(low, poly[a, axis])
        high = max(high, poly[a, axis])
    return low, high


@njit(cache=True, nogil=True)
def _deposit(poly, n, i, nx, row):
    """Add a piece of surface inside column voxel `i` to the row of increments."""
    area = 0.0
    moment = 0.0
    x0, y0, z0 = poly[0, 0], poly[0, 1], poly[0, 2]
    for a in range(1, n - 1):
        part = 0.5 * (
            (poly[a, 1] - y0) * (poly[a + 1, 2] - z0) - (poly[a, 2] - z0) * (poly[a + 1, 1] - y0)
        )
        area += part
        moment += part * (x0 + poly[a, 0] + poly[a + 1, 0]) / 3.0
    if i < 0:
        row[0] -= area
    elif i < nx:
        moment -= i * area
        row[i] -= area - moment
        row[i + 1] -= moment


@njit(cache=True, nogil=True)
def _deposit_row(poly, n, nx, row, low, high):
    """Cut a piece of surface that lies in one row into columns and add each."""
    x0, x1 = _span(poly, n, 0)
    first = max(-1, math.floor(min(max(x0, -1.0), nx + 1.0)))
    last = min(nx, math.floor(min(max(x1, -1.0), nx + 1.0)))
    for i in range(first, last):
        n_low, n_high = _cut(poly, n, 0, i + 1.0, low, high)
        if n_low > 2:
            _deposit(low, n_low, i, nx, row)
        n = n_high
        for a in range(n):
            for c in range(3):
                poly[a, c] = high[a, c]
    if n > 2:
        _deposit(poly, n, last, nx, row)


@njit(cache=True, nogil=True)
def _cover(corner, k, nx, ny, rows, poly, strip, low, high):
    """Add the part of one triangle that lies in plane `k` to the increments of its rows."""
    n = 3
    for a in range(3):
        for c in range(3):
            poly[a, c] = corner[a, c]
    z0, z1 = _span(poly, n, 2)
    if z0 < k:
        _, n = _cut(poly, n, 2, float(k), low, high)
        for a in range(n):
            for c in range(3):
                poly[a, c] = high[a, c]
    if z1 > k + 1.0:
        n, _ = _cut(poly, n, 2, k + 1.0, low, high)
        for a in range(n):
            for c in range(3):
                poly[a, c] = low[a, c]
    if n < 3:
        return
    y0, y1 = _span(poly, n, 1)
    first = math.floor(min(max(y0, -1.0), ny + 1.0))
    last = math.floor(min(max(y1, -1.0), ny + 1.0))
    for j in range(first, min(last, ny - 1) + 1):
        if j < last:
            n_low, n_high = _cut(poly, n, 1, j + 1.0, strip, high)
            for a in range(n_high):
                for c in range(3):
                    poly[a, c] = high[a, c]
            n = n_high
        else:
            n_low = n
            for a in range(n):
                for c in range(3):
                    strip[a, c] = poly[a, c]
        if n_low > 2 and j >= 0:
            _deposit_row(strip, n_low, nx, rows[j], low, high)
        if n < 3:
            break


@njit(cache=True, nogil=True)
def _beside(ya, za, yb, zb, y, z):
    """Twice the signed area of (a, b, ray); never 0 after a symbolic nudge of the ray.

    A ray that meets an edge exactly is treated as if moved by (e, e^2) with e
    infinitely small (Edelsbrunner & Muecke 1990, ACM Trans. Graph. 9:66-104), so that it
    belongs to exactly one of the triangles round the edge.
    """
    dy = yb - ya
    dz = zb - za
    side = dy * (z - za) - dz * (y - ya)
    if side != 0:
        return side, side > 0
    if dz != 0:
        return side, dz < 0
    return side, dy > 0


@njit(cache=True, nogil=True)
def _wind(corner, whole, step, z, nx, ny, turns):
    """Count one triangle's crossings with the rays along x through the centres of a plane."""
    y0, z0 = whole[0, 0], whole[0, 1]
    y1, z1 = whole[1, 0], whole[1, 1]
    y2, z2 = whole[2, 0], whole[2, 1]
    twice = (y1 - y0) * (z2 - z0) - (z1 - z0) * (y2 - y0)
    if twice == 0 or min(z0, min(z1, z2)) > z or max(z0, max(z1, z2)) < z:
        return
    half = step // 2
    # Floor division rounds towards minus infinity, so these bounds hold below zero too.
    first = max(0, (min(y0, min(y1, y2)) - half) // step)
    last = min(ny - 1, (max(y0, max(y1, y2)) - half) // step + 1)
    for j in range(first, last + 1):
        y = j * step + half
        s0, left0 = _beside(y1, z1, y2, z2, y, z)
        s1, left1 = _beside(y2, z2, y0, z0, y, z)
        s2, left2 = _beside(y0, z0, y1, z1, y, z)
        if left0 == left1 and left1 == left2:
            x = (s0 * corner[0, 0] + s1 * corner[1, 0] + s2 * corner[2, 0]) / twice
            i = math.ceil(min(max(x - 0.5, 0.0), float(nx)))
            # A ray along +x enters where the normal points to -x.
            turns[j, i] += -1 if twice > 0 else 1


@njit(cache=True, nogil=True)
def fill_planes(corners, whole, step, start, member, occupancy, winding):
    """Solid fraction and winding number, plane by plane.

    The fraction is exact: by the divergence theorem a voxel's solid volume is a
    sum over the pieces of surface in its row, each cut at the voxel's walls.

    Parameters
    ----------
    corners : (m, 3, 3) float64
        Triangle corners in voxel units, x y z.
    whole : (m, 3, 2) int64
        Their y and z in whole steps.
    step : int
        Whole steps in one voxel, even.
    start, member : arrays
        From `bin_by_plane`.
    occupancy : (nz, ny, nx) uint8
        Filled: 0 to 255.
    winding : (nz, ny, nx) int8
        Filled: turns of the surface round each voxel centre, clipped to +-127.
    """
    nz, ny, nx = occupancy.shape
    rows = np.empty((ny, nx + 1))
    turns = np.empty((ny, nx + 1), np.int32)
    # A triangle cut by the six walls of a voxel has at most nine corners.
    poly = np.empty((16, 3))
    strip = np.empty((16, 3))
    low = np.empty((16, 3))
    high = np.empty((16, 3))
    for k in range(nz):
        rows[:] = 0.0
        turns[:] = 0
        for p in range(start[k], start[k + 1]):
            t = member[p]
            _cover(corners[t], k, nx, ny, rows, poly, strip, low, high)
            _wind(corners[t], whole[t], step, k * step + step // 2, nx, ny, turns)
        for j in range(ny):
            solid = 0.0
            turn = 0
            for i in range(nx):
                solid += rows[j, i]
                turn += turns[j, i]
                occupancy[k, j, i] = int(255.0 * min(max(solid, 0.0), 1.0) + 0.5)
                winding[k, j, i] = min(max(turn, -127), 127)

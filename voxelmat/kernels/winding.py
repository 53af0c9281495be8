"""Winding number of a closed mesh at any points, by exact integer tests along x."""

import numpy as np
from numba import njit


@njit(cache=True, nogil=True)
def bin_by_column(whole, bits, across):
    """Which triangles touch which cell of a square raster over y and z.

    Parameters
    ----------
    whole : (m, 3, 2) int64
        y and z of the corners in whole steps, 0 or more.
    bits : int
        A cell is 2**bits steps wide.
    across : int
        Cells along y and along z.

    Returns
    -------
    start : (across**2 + 1,) int64
    member : int32
        Triangles of cell c: ``member[start[c]:start[c + 1]]``.
    """
    m = whole.shape[0]
    start = np.zeros(across * across + 1, np.int64)
    member = np.empty(0, np.int32)
    fill = start[:-1].copy()
    for counting in (True, False):
        for t in range(m):
            y0 = min(whole[t, 0, 0], min(whole[t, 1, 0], whole[t, 2, 0])) >> bits
            y1 = max(whole[t, 0, 0], max(whole[t, 1, 0], whole[t, 2, 0])) >> bits
            z0 = min(whole[t, 0, 1], min(whole[t, 1, 1], whole[t, 2, 1])) >> bits
            z1 = max(whole[t, 0, 1], max(whole[t, 1, 1], whole[t, 2, 1])) >> bits
            for z in range(z0, z1 + 1):
                for y in range(y0, y1 + 1):
                    cell = z * across + y
                    if counting:
                        start[cell + 1] += 1
                    else:
                        member[fill[cell]] = t
                        fill[cell] += 1
        if counting:
            for c in range(across * across):
                start[c + 1] += start[c]
            fill = start[:-1].copy()
            member = np.empty(start[-1], np.int32)
    return start, member


@njit(cache=True, nogil=True)
def _beside(ya, za, yb, zb, y, z):
    """Side of an edge that a ray passes, nudged symbolically as in `voxelise`."""
    dy = yb - ya
    dz = zb - za
    side = dy * (z - za) - dz * (y - ya)
    if side != 0:
        return side, side > 0
    if dz != 0:
        return side, dz < 0
    return side, dy > 0


@njit(cache=True, nogil=True)
def winding_at(xs, whole, bits, across, start, member, points, points_whole, turns):
    """Winding number at points.

    Parameters
    ----------
    xs : (m, 3) float64
        x of the corners.
    whole, bits, across, start, member
        As for `bin_by_column`.
    points : (n,) float64
        x of the points.
    points_whole : (n, 2) int64
        y and z of the points in whole steps, inside the raster.
    turns : (n,) int32
        Filled.
    """
    for p in range(points.shape[0]):
        y, z = points_whole[p, 0], points_whole[p, 1]
        cell = (z >> bits) * across + (y >> bits)
        count = 0
        for q in range(start[cell], start[cell + 1]):
            t = member[q]
            y0, z0 = whole[t, 0, 0], whole[t, 0, 1]
            y1, z1 = whole[t, 1, 0], whole[t, 1, 1]
            y2, z2 = whole[t, 2, 0], whole[t, 2, 1]
            twice = (y1 - y0) * (z2 - z0) - (z1 - z0) * (y2 - y0)
            if twice == 0:
                continue
            s0, left0 = _beside(y1, z1, y2, z2, y, z)
            s1, left1 = _beside(y2, z2, y0, z0, y, z)
            s2, left2 = _beside(y0, z0, y1, z1, y, z)
            if left0 == left1 and left1 == left2:
                x = (s0 * xs[t, 0] + s1 * xs[t, 1] + s2 * xs[t, 2]) / twice
                if x < points[p]:
                    count += -1 if twice > 0 else 1
        turns[p] = count

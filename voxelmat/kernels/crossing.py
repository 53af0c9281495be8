"""Pairs of triangles that cross each other, by a bounding-box tree."""

import numpy as np
from numba import njit


@njit(cache=True, nogil=True)
def _height(a, b, c, p):
    """Six times the volume of (a, b, c, p) and the size of its largest term."""
    ux, uy, uz = b[0] - a[0], b[1] - a[1], b[2] - a[2]
    vx, vy, vz = c[0] - a[0], c[1] - a[1], c[2] - a[2]
    wx, wy, wz = p[0] - a[0], p[1] - a[1], p[2] - a[2]
    nx, ny, nz = uy * vz - uz * vy, uz * vx - ux * vz, ux * vy - uy * vx
    value = nx * wx + ny * wy + nz * wz
    size = (abs(nx) + abs(ny) + abs(nz)) * (abs(wx) + abs(wy) + abs(wz))
    return value, size


@njit(cache=True, nogil=True)
def _sign(a, b, c, p, small):
    value, size = _height(a, b, c, p)
    if value > small * size:
        return 1
    if value < -small * size:
        return -1
    return 0


@njit(cache=True, nogil=True)
def _pierces(p, q, a, b, c, small):
    """Whether the segment pq passes through the inside of triangle abc."""
    sp = _sign(a, b, c, p, small)
    sq = _sign(a, b, c, q, small)
    if sp == 0 or sq == 0 or sp == sq:
        return False
    s0 = _sign(p, q, a, b, small)
    if s0 == 0:
        return False
    s1 = _sign(p, q, b, c, small)
    if s1 != s0:
        return False
    return _sign(p, q, c, a, small) == s0


@njit(cache=True, nogil=True)
def _crossing(vertices, f, g, small):
    """Whether two triangles cross; touching, and sharing a corner or an edge, is not it."""
    for side in range(2):
        one = f if side == 0 else g
        two = g if side == 0 else f
        for e in range(3):
            p = one[e]
            q = one[e + 1 if e < 2 else 0]
            if p == two[0] or p == two[1] or p == two[2]:
                continue
            if q == two[0] or q == two[1] or q == two[2]:
                continue
            if _pierces(
                vertices[p],
                vertices[q],
                vertices[two[0]],
                vertices[two[1]],
                vertices[two[2]],
                small,
            ):
                return True
    return False


@njit(cache=True, nogil=True)
def crossing_pairs(vertices, faces, boxes, order, leaf, small, budget, pairs):
    """Find crossing triangles.

    Parameters
    ----------
    vertices : (n, 3) float64
    faces : (m, 3) int32
        In tree order.
    boxes : (2 * leaves - 1, 6) float64
        As for `nearest.signed_distance`.
    order : (m,) int64
        Number of each face in the mesh.
    leaf : int
        Triangles a leaf.
    small : float
        Relative height below which a corner counts as lying on a plane.
    budget : int
        Pairs to look at, at most.
    pairs : (p, 2) int64
        Filled with face numbers until full.

    Returns
    -------
    found : int
    looked : int
        Pairs looked at; equal to `budget` when it ran out.
    """
    m = faces.shape[0]
    leaves = (boxes.shape[0] + 1) // 2
    stack = np.empty(64, np.int64)
    found = 0
    looked = 0
    for t in range(m):
        low = np.empty(3)
        high = np.empty(3)
        for c in range(3):
            a, b, d = vertices[faces[t, 0], c], vertices[faces[t, 1], c], vertices[faces[t, 2], c]
            low[c] = min(a, min(b, d))
            high[c] = max(a, max(b, d))
        top = 1
        stack[0] = 0
        while top > 0:
            top -= 1
            node = stack[top]
            apart = False
            for c in range(3):
                if boxes[node, c] > high[c] or boxes[node, c + 3] < low[c]:
                    apart = True
            if apart:
                continue
            if node < leaves - 1:
                stack[top] = 2 * node + 1
                stack[top + 1] = 2 * node + 2
                top += 2
                continue
            first = (node - leaves + 1) * leaf
            # Each pair is met from both sides; it is looked at from the first.
            for u in range(max(first, t + 1), min(first + leaf, m)):
                if looked == budget or found == pairs.shape[0]:
                    return found, looked
                looked += 1
                if _crossing(vertices, faces[t], faces[u], small):
                    pairs[found, 0] = order[t]
                    pairs[found, 1] = order[u]
                    found += 1
    return found, looked

"""Distance of design voxels from the interface between two pure zones, within a short reach."""

import numpy as np
from numba import njit


@njit(cache=True, nogil=True)
def _spread(
    extended, zone, wanted, pair, limit, spacing, reach, away, row, column, distance, found
):
    """Offer the box of one voxel beside an interface to the voxels of zone `wanted` near it."""
    below = max(abs(away) - 0.5, 0.0) * spacing[0]
    for j in range(max(row - reach[1], 0), min(row + reach[1] + 1, extended.shape[0])):
        across = max(abs(j - row) - 0.5, 0.0) * spacing[1]
        for k in range(max(column - reach[2], 0), min(column + reach[2] + 1, extended.shape[1])):
            if zone[extended[j, k]] != wanted:
                continue
            along = max(abs(k - column) - 0.5, 0.0) * spacing[2]
            d = np.sqrt(below * below + across * across + along * along)
            nearer = d < distance[j, k] or (d == distance[j, k] and pair < found[j, k])
            if d <= limit and nearer:
                distance[j, k] = d
                found[j, k] = pair


@njit(cache=True, nogil=True)
def interface_distance(labels, at, extended, zone, pair_of, limit, spacing, reach, distance, found):
    """How far the voxels of one plane are from the nearest interface of theirs, and which it is.

    labels u16 [l, r, c] the plane `at` and its neighbours as far as `reach` and one more (fewer
    at the ends of the design), extended u16 [r, c] the labels of the plane carried one voxel
    beyond the part, zone u8 [palette] (0 for what is not pure), pair_of u8 [zones, zones] (0
    for a hard interface), limit f64 [pairs + 1] beyond which a distance is not wanted, spacing
    f64 [3] and reach i64 [3] in voxels along layers, rows, columns; distance f64 [r, c]
    (infinite where there is none) and found u8 [r, c] the pair, 0 for none (out).

    The distance goes from a voxel's centre to the box of a voxel of the other zone that touches
    this zone by a face, so it is exact for flat interfaces along the grid, at any spacing.
    """
    nl, nr, nc = labels.shape
    distance[:] = np.inf
    found[:] = 0
    beside = np.empty(6, np.uint8)
    for i in range(nl):
        for j in range(nr):
            for k in range(nc):
                own = zone[labels[i, j, k]]
                if own == 0:
                    continue
                beside[:] = 0
                for m in range(6):
                    step = 1 if m & 1 else -1
                    a = i + (step if m >> 1 == 0 else 0)
                    b = j + (step if m >> 1 == 1 else 0)
                    c = k + (step if m >> 1 == 2 else 0)
                    if min(a, b, c) < 0 or a >= nl or b >= nr or c >= nc:
                        continue
                    other = zone[labels[a, b, c]]
                    if other == own or pair_of[own, other] == 0:
                        continue
                    known = False
                    for q in range(m):
                        known = known or beside[q] == other
                    beside[m] = other
                    if not known and abs(i - at) <= reach[0]:
                        pair = pair_of[own, other]
                        _spread(
                            extended, zone, other, pair, limit[pair], spacing, reach,
                            i - at, j, k, distance, found,
                        )  # fmt: skip


@njit(cache=True, nogil=True)
def mark_ramps(lower, upper, hard):
    """Set the cells all eight corners of which lie near the same interface to 1 + its pair.

    lower, upper u8 [r, c] pairs of two planes, hard u8 [r - 1, c - 1] (in and out).
    """
    for j in range(hard.shape[0]):
        for k in range(hard.shape[1]):
            pair = lower[j, k]
            same = pair > 0
            for m in range(8):
                plane = lower if m < 4 else upper
                same = same and plane[j + (m >> 1 & 1), k + (m & 1)] == pair
            if same:
                hard[j, k] = 1 + pair

"""Void-and-cluster ranking of a periodic 3-D box (Ulichney 1993, Proc. SPIE 1913:332-343)."""

import numpy as np
from numba import njit

# The box is searched in blocks of BLOCK^3: each keeps the lowest energy among its empty voxels
# (the largest void) and the highest among its filled ones (the tightest cluster), so that one
# change costs a few blocks and not the whole box.
BLOCK = 4


@njit(cache=True)
def _search_block(energy, filled, b, void, cluster, void_at, cluster_at):
    n = energy.shape[0]
    m = n // BLOCK
    bz, by, bx = b // (m * m), b // m % m, b % m
    low, high = np.inf, -np.inf
    low_at, high_at = -1, -1
    for z in range(bz * BLOCK, (bz + 1) * BLOCK):
        for y in range(by * BLOCK, (by + 1) * BLOCK):
            for x in range(bx * BLOCK, (bx + 1) * BLOCK):
                e = energy[z, y, x]
                if filled[z, y, x]:
                    if e > high:
                        high, high_at = e, (z * n + y) * n + x
                elif e < low:
                    low, low_at = e, (z * n + y) * n + x
    void[b], void_at[b] = low, low_at
    cluster[b], cluster_at[b] = high, high_at


@njit(cache=True)
def _flip(energy, filled, kernel, at, void, cluster, void_at, cluster_at):
    """Fill or empty voxel `at`, spread its energy, search the touched blocks again."""
    n = energy.shape[0]
    r = kernel.shape[0] // 2
    m = n // BLOCK
    z, y, x = at // (n * n), at // n % n, at % n
    sign = -1.0 if filled[z, y, x] else 1.0
    filled[z, y, x] = not filled[z, y, x]
    for i in range(-r, r + 1):
        for j in range(-r, r + 1):
            for k in range(-r, r + 1):
                w = sign * kernel[i + r, j + r, k + r]
                energy[(z + i) % n, (y + j) % n, (x + k) % n] += w
    span = min(m, (2 * r) // BLOCK + 2)
    for i in range(span):
        bz = ((z - r) // BLOCK + i) % m
        for j in range(span):
            by = ((y - r) // BLOCK + j) % m
            for k in range(span):
                bx = ((x - r) // BLOCK + k) % m
                b = (bz * m + by) * m + bx
                _search_block(energy, filled, b, void, cluster, void_at, cluster_at)


@njit(cache=True)
def void_and_cluster(energy, filled, kernel, rank):
    """Rank all voxels; `filled` holds the initial pattern, `energy` small noise against ties.

    Shapes: energy f64 [n, n, n], filled bool [n, n, n], kernel f64 [k, k, k] with k odd and
    k <= n, rank i32 [n, n, n] (out). n is a multiple of BLOCK. Returns the swaps made.
    """
    n = energy.shape[0]
    n_blocks = (n // BLOCK) ** 3
    void, cluster = np.empty(n_blocks), np.empty(n_blocks)
    void_at, cluster_at = np.empty(n_blocks, np.int64), np.empty(n_blocks, np.int64)
    flat, order = filled.ravel(), rank.ravel()
    start = np.flatnonzero(flat)
    filled[:] = False
    for at in start:
        _flip(energy, filled, kernel, at, void, cluster, void_at, cluster_at)
    for b in range(n_blocks):
        _search_block(energy, filled, b, void, cluster, void_at, cluster_at)
    swaps = 0
    while swaps < 64 * start.size:  # move the tightest cluster to the largest void, until stuck
        out = cluster_at[np.argmax(cluster)]
        _flip(energy, filled, kernel, out, void, cluster, void_at, cluster_at)
        into = void_at[np.argmin(void)]
        _flip(energy, filled, kernel, into, void, cluster, void_at, cluster_at)
        if into == out:
            break
        swaps += 1
    initial, initial_energy = filled.copy(), energy.copy()
    for r in range(start.size - 1, -1, -1):
        out = cluster_at[np.argmax(cluster)]
        _flip(energy, filled, kernel, out, void, cluster, void_at, cluster_at)
        order[out] = r
    filled[:] = initial
    energy[:] = initial_energy
    for b in range(n_blocks):
        _search_block(energy, filled, b, void, cluster, void_at, cluster_at)
    for r in range(start.size, order.size):
        into = void_at[np.argmin(void)]
        _flip(energy, filled, kernel, into, void, cluster, void_at, cluster_at)
        order[into] = r
    return swaps

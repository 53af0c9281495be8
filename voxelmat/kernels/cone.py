"""Weighted sum over a neighbourhood of voxels: the loop of the cone filter."""

import numpy as np
from numba import njit, prange

__all__ = ["neighbour_sum"]


@njit(cache=True, parallel=True)
def neighbour_sum(x, weights, offsets, out):
    """out[v] = sum over o of weights[o] x[v + offsets[o]], nothing beyond the edge.

    x, out: f64 [nz, ny, nx]; weights: f64 [n]; offsets: i64 [n, 3] along z, y, x.
    Each output row gathers in one order, so the bits are the same on any number of threads.
    """
    nz, ny, nx = x.shape
    for k in prange(nz):
        row = np.empty(nx)
        for j in range(ny):
            for i in range(nx):
                row[i] = 0.0
            for o in range(weights.size):
                kk = k + offsets[o, 0]
                jj = j + offsets[o, 1]
                if kk < 0 or kk >= nz or jj < 0 or jj >= ny:
                    continue
                shift = offsets[o, 2]
                first = max(0, -shift)
                length = min(nx, nx - shift) - first
                if length <= 0:
                    continue
                source = x[kk, jj, first + shift : first + shift + length]
                target = row[first : first + length]
                w = weights[o]
                for i in range(length):
                    target[i] += w * source[i]
            out[k, j, :] = row

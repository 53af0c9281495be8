"""Entropic steps of mirror descent: on simplices over resins, and on intervals from 0 to 1."""

import numpy as np
from numba import njit, prange

__all__ = ["interval_step", "simplex_step"]


@njit(cache=True, parallel=True)
def simplex_step(w, slope, prices, rate, least, new, value, curvature):
    """New ~ w exp(-rate (slope[0] + prices slope[1:])), scaled to sum 1 in each voxel.

    w, new (out): f64 [K, n]; slope: f64 [1 + m, K, n]; prices: f64 [m]; least: smallest fraction.
    value [blocks, m] and curvature [blocks, m, m]: out, partial sums of slope . (new - w) of
    each constraint and of minus its derivative by the prices.
    """
    resins, n = w.shape
    m, blocks = prices.size, value.shape[0]
    for b in prange(blocks):
        total, bend = np.zeros(m), np.zeros((m, m))
        mean = np.empty(m)
        h = np.empty(resins)
        for j in range(b * n // blocks, (b + 1) * n // blocks):
            for k in range(resins):
                h[k] = slope[0, k, j]
                for i in range(m):
                    h[k] += prices[i] * slope[1 + i, k, j]
            lowest = h.min()
            size = 0.0
            for k in range(resins):
                h[k] = max(w[k, j] * np.exp(-rate * (h[k] - lowest)), least)
                size += h[k]
            mean[:] = 0.0
            for k in range(resins):
                h[k] /= size
                new[k, j] = h[k]
                for i in range(m):
                    mean[i] += h[k] * slope[1 + i, k, j]
                    total[i] += slope[1 + i, k, j] * (h[k] - w[k, j])
            for k in range(resins):
                for i in range(m):
                    off = rate * h[k] * (slope[1 + i, k, j] - mean[i])
                    for c in range(m):
                        bend[i, c] += off * (slope[1 + c, k, j] - mean[c])
        value[b] = total
        curvature[b] = bend


@njit(cache=True, parallel=True)
def interval_step(x, slope, prices, rate, least, new, value, curvature):
    """The same for unknowns between 0 and 1, each a choice between itself and the rest to 1.

    x, new (out): f64 [n]; slope: f64 [1 + m, n]; the others as for `simplex_step`.
    """
    n = x.size
    m, blocks = prices.size, value.shape[0]
    for b in prange(blocks):
        total, bend = np.zeros(m), np.zeros((m, m))
        for j in range(b * n // blocks, (b + 1) * n // blocks):
            h = slope[0, j]
            for i in range(m):
                h += prices[i] * slope[1 + i, j]
            on, off = x[j], 1.0 - x[j]
            if h > 0.0:
                on *= np.exp(-rate * h)
            else:
                off *= np.exp(rate * h)
            y = min(max(on / (on + off), least), 1.0 - least)
            new[j] = y
            for i in range(m):
                total[i] += slope[1 + i, j] * (y - x[j])
                for c in range(m):
                    bend[i, c] += rate * y * (1.0 - y) * slope[1 + i, j] * slope[1 + c, j]
        value[b] = total
        curvature[b] = bend

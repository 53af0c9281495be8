"""One evaluation of the dual of the separable subproblem of moving asymptotes."""

import numpy as np
from numba import njit, prange

__all__ = ["dual_terms"]


@njit(cache=True, parallel=True)
def dual_terms(multipliers, p, q, lower, upper, low, high, x, value, curvature):
    """Minimise the Lagrangian in x at given multipliers; add up constraints and curvature.

    multipliers: f64 [m]; p, q: f64 [1 + m, n], row 0 the objective; lower, upper: the
    asymptotes [n]; low, high: the bounds of this step [n]; x: out [n]. value [blocks, m] and
    curvature [blocks, m, m] take one partial sum a block, so that the caller adds them in one
    order whatever the number of threads.
    """
    m = multipliers.size
    n = x.size
    blocks = value.shape[0]
    for b in prange(blocks):
        g = np.zeros(m)
        h = np.zeros((m, m))
        slope = np.empty(m)
        for j in range(b * n // blocks, (b + 1) * n // blocks):
            pj = p[0, j]
            qj = q[0, j]
            for i in range(m):
                pj += multipliers[i] * p[i + 1, j]
                qj += multipliers[i] * q[i + 1, j]
            sp = np.sqrt(pj)
            sq = np.sqrt(qj)
            y = (lower[j] * sp + upper[j] * sq) / (sp + sq)
            free = True
            if y <= low[j]:
                y = low[j]
                free = False
            elif y >= high[j]:
                y = high[j]
                free = False
            x[j] = y
            du = 1.0 / (upper[j] - y)
            dl = 1.0 / (y - lower[j])
            for i in range(m):
                g[i] += p[i + 1, j] * du + q[i + 1, j] * dl
            if free:
                bend = 1.0 / (2.0 * pj * du * du * du + 2.0 * qj * dl * dl * dl)
                for i in range(m):
                    slope[i] = p[i + 1, j] * du * du - q[i + 1, j] * dl * dl
                for i in range(m):
                    for k in range(m):
                        h[i, k] += slope[i] * slope[k] * bend
        value[b] = g
        curvature[b] = h

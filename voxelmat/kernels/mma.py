"""Passes over all unknowns of the method of moving asymptotes: model, dual, values."""

import numpy as np
from numba import njit, prange

__all__ = ["dual_terms", "fill_model", "model_values", "place_asymptotes"]


@njit(cache=True, parallel=True)
def place_asymptotes(x, last, before, span, near, far, widen, narrow, lower, upper):
    """Move the asymptotes with x: apart where it keeps its direction, closer where it turns.

    x and the two designs before it: f64 [n]; span: the range of each unknown [n]; near, far:
    limits of the distance, of the range; lower, upper: in and out [n].
    """
    for j in prange(x.size):
        trend = (x[j] - last[j]) * (last[j] - before[j])
        factor = 1.0
        if trend > 0.0:
            factor = widen
        elif trend < 0.0:
            factor = narrow
        least, most = near * span[j], far * span[j]
        lower[j] = x[j] - min(max(factor * (last[j] - lower[j]), least), most)
        upper[j] = x[j] + min(max(factor * (upper[j] - last[j]), least), most)


@njit(cache=True, parallel=True)
def fill_model(
    x, dF, lower, upper, bottom, top, convexity, move, inside, p, q, low, high, touched
):  # fmt: skip
    """Coefficients and bounds of the separable model about x.

    x, lower, upper, bottom, top (the unknowns' own bounds): f64 [n]; dF: f64 [1 + m, n];
    convexity: f64 [1 + m], added slope over the range; move, inside: longest step of the range
    and of the way to an asymptote; p, q: out [1 + m, n]; low, high: out [n]; touched
    [blocks, 1 + m]: out, partial sums of what the model holds at x itself.
    """
    n = x.size
    rows, blocks = dF.shape[0], touched.shape[0]
    for b in prange(blocks):
        first, stop = b * n // blocks, (b + 1) * n // blocks
        for j in range(first, stop):
            span = top[j] - bottom[j]
            down, up = x[j] - lower[j], upper[j] - x[j]
            low[j] = max(bottom[j], x[j] - min(inside * down, move * span))
            high[j] = min(top[j], x[j] + min(inside * up, move * span))
        for i in range(rows):
            total = 0.0
            for j in range(first, stop):
                down, up = x[j] - lower[j], upper[j] - x[j]
                slope = dF[i, j]
                more = 1e-3 * abs(slope) + convexity[i] / (top[j] - bottom[j])
                rise, fall = max(slope, 0.0) + more, max(-slope, 0.0) + more
                p[i, j] = up * up * rise
                q[i, j] = down * down * fall
                total += up * rise + down * fall
            touched[b, i] = total


@njit(cache=True, parallel=True)
def model_values(x, p, q, lower, upper, value):
    """Partial sums [blocks, 1 + m] of p / (upper - x) + q / (x - lower)."""
    n = x.size
    rows, blocks = p.shape[0], value.shape[0]
    for b in prange(blocks):
        first, stop = b * n // blocks, (b + 1) * n // blocks
        for i in range(rows):
            total = 0.0
            for j in range(first, stop):
                total += p[i, j] / (upper[j] - x[j]) + q[i, j] / (x[j] - lower[j])
            value[b, i] = total


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
                    for k in range(i + 1):
                        h[i, k] += slope[i] * slope[k] * bend
        for i in range(m):
            for k in range(i):
                h[k, i] = h[i, k]
        value[b] = g
        curvature[b] = h

"""Three-dimensional error diffusion over any number of resins: one layer, from the one below.

Vector diffusion: each site lays the resin it owes most, and what it then owes of every resin is
passed on, 60 % within the layer by the weights 7, 3, 5, 1 over 16 (Floyd & Steinberg 1976, Proc.
SID 17:75-77) and 40 % to five sites of the next layer. What is passed on sums to zero, so the
share of each resin stays right. Serial by nature: a site needs those before it, and the layer
below.
"""

import numpy as np
from numba import njit

from voxelmat.kernels.halftone import (
    _column_weights,
    _outline_row,
    _ramp_line,
    _row_line,
    _row_pair,
    _stamp,
    _support_row,
)
from voxelmat.kernels.sites import _mixed, _site_word, _unit

#: Smaller fractions are rounding: such a resin is never laid.
_LEAST = np.float32(1e-6)


@njit(cache=True, nogil=True)
def _fraction_row(
    rows, near, cumulative, hard, ramp, pair_at, i, w, column_at, column_w, wx, base, slope, out
):
    """Fractions of all resins along a printer row, out f32 [columns, resins]."""
    last = cumulative.shape[0]
    for x in range(out.shape[0]):
        out[x, last] = np.float32(1.0)
    for f in range(last):
        _row_line(rows, near, cumulative, hard, i, w, f, base, slope)
        for x in range(out.shape[0]):
            j = column_at[x]
            out[x, f] = base[j] + wx[x] * slope[j]
    for x in range(out.shape[0]):
        for f in range(last, 0, -1):
            out[x, f] -= out[x, f - 1]
    if ramp.shape[0] > 0 and _ramp_line(ramp, hard, i, w, base):
        for x in range(out.shape[0]):
            j = column_at[x]
            pair = hard[i, j]
            if pair > 1:
                first = np.float32(0.5) + (base[j] + column_w[x] * (base[j + 1] - base[j]))
                first = min(max(first, np.float32(0.0)), np.float32(1.0))
                out[x, :] = np.float32(0.0)
                out[x, pair_at[pair, 0]] = first
                out[x, pair_at[pair, 1]] = np.float32(1.0) - first


@njit(cache=True, nogil=True)
def _owed(fraction, line, carry, x, first, value):
    """What site `x` owes of each resin; returns how many resins its blend has.

    fraction f32 [columns, resins], line f32 [columns + 2, resins] from within the layer, carry
    f32 [columns, resins] from the layer below, `first` the head start of a site that has no
    dithered site below it, value f32 [resins] (out). What is owed of resins that the blend does
    not have is shared out among those that it has.
    """
    n = 0
    stray = np.float32(0.0)
    for q in range(value.shape[0]):
        value[q] = line[x + 1, q] + carry[x, q]
        if fraction[x, q] > _LEAST:
            n += 1
        else:
            stray += value[q]
            value[q] = np.float32(0.0)
    if n > 1:
        share = np.float32(1.0) / np.float32(n)
        stray *= share
        for q in range(value.shape[0]):
            f = fraction[x, q]
            if f > _LEAST:
                value[q] += f + stray + first * (share - f)
    return n


@njit(cache=True, nogil=True)
def _most(fraction, x, value, word, noise):
    """The resin of the blend of site `x` that is owed most, with noise on what each is owed."""
    chosen = -1
    best = np.float32(0.0)
    for q in range(value.shape[0]):
        if fraction[x, q] > _LEAST:
            v = value[q] + noise * (_unit(_mixed(word + np.uint64(q))) - np.float32(0.5))
            if chosen < 0 or v > best:
                chosen = q
                best = v
    return chosen


@njit(cache=True, nogil=True)
def _pass_on(value, chosen, x, step, weights, line, following, before, above, after):
    """Spread what stays owed over the neighbours; arrays f32 [columns + 2, resins]."""
    for q in range(value.shape[0]):
        e = value[q] - (np.float32(1.0) if q == chosen else np.float32(0.0))
        line[x + 1 + step, q] += e * weights[0]
        following[x + 1 - step, q] += e * weights[1]
        following[x + 1, q] += e * weights[2]
        following[x + 1 + step, q] += e * weights[3]
        above[x + 1, q] += e * weights[4]
        side = e * weights[5]
        before[x + 1, q] += side
        after[x + 1, q] += side
        above[x, q] += side
        above[x + 2, q] += side


@njit(cache=True, nogil=True)
def _sweep(
    inside, fraction, numbers, layer, row, column, key, weights, noise, head_start, carry,
    dithered, line, following, before, above, after, value, site,
):  # fmt: skip
    """Lay the sites of one row, alternately from the left and from the right."""
    n_columns = inside.shape[0]
    step = 1 if (layer + row) & 1 == 0 else -1
    x = 0 if step == 1 else n_columns - 1
    for _ in range(n_columns):
        if inside[x]:
            first = head_start if dithered[x] == 0 else np.float32(0.0)
            n = _owed(fraction, line, carry, x, first, value)
            dithered[x] = 1 if n > 1 else 0
            if n > 1:
                word = _site_word(layer, row, column + x, key)
                chosen = _most(fraction, x, value, word, noise)
                _pass_on(value, chosen, x, step, weights, line, following, before, above, after)
            else:
                chosen = 0
                for q in range(1, value.shape[0]):
                    chosen = q if fraction[x, q] > fraction[x, chosen] else chosen
            site[x] = numbers[chosen]
        else:
            dithered[x] = 0
        x += step


@njit(cache=True, nogil=True)
def diffuse_layer(
    outlines,
    lower,
    upper,
    near,
    layer_w,
    cumulative,
    numbers,
    hard,
    ramp,
    pair_at,
    row_at,
    row_w,
    row_ow,
    column_at,
    column_w,
    column_ow,
    window,
    start,
    key,
    weights,
    noise,
    head_start,
    carry,
    dithered,
    sites,
):
    """Halftone one printer layer by error diffusion.

    Parameters as `halftone.halftone_layer`, but: pair_at i64 [pairs + 2, 2] position of a
    pair's resins in the order of laying, start i64 [3] layer, row and column of the first pixel
    on the tray, weights f32 [6] the four within the layer, straight up, and up to each of four
    sides, noise f32 the whole width of the noise, head_start f32, carry f32 [rows, columns,
    resins] and dithered u8 [rows, columns] what the layer below left (in) and this one leaves
    (out), both zero below the lowest layer.
    """
    n_rows, n_columns, n_resins = carry.shape
    n_cells = outlines.shape[2]
    part = np.empty(n_cells, np.float32)
    both = np.empty(n_cells, np.float32)
    base = np.empty(n_cells, np.float32)
    slope = np.empty(n_cells, np.float32)
    rows = np.empty((2, n_resins - 1, n_cells), np.float32)
    fraction = np.empty((n_columns, n_resins), np.float32)
    value = np.empty(n_resins, np.float32)
    wx = np.empty(n_columns, np.float32)
    resin = np.ones(n_columns, np.uint8)
    inside = np.zeros(n_columns, np.uint8)
    support = np.full(n_columns, numbers[n_resins], np.uint8)
    line = np.zeros((2, n_columns + 2, n_resins), np.float32)
    above = np.zeros((3, n_columns + 2, n_resins), np.float32)  # rows y - 1, y, y + 1 in turn
    at = -2
    for y in range(n_rows):
        i = np.int64(row_at[y])
        site = sites[y]
        site[:] = 0
        on_grid = window[0] <= y < window[1]
        above[(y + 1) % 3] = 0
        has_part = on_grid and _outline_row(outlines[0], i, row_ow[y], part)
        if on_grid and _support_row(outlines, i, row_ow[y], part, both):
            _stamp(both, column_at, column_ow, window[2], window[3], support, site)
        if has_part:
            _row_pair(lower, upper, layer_w, cumulative, i, at, rows)
            at = i
            _column_weights(hard[i], column_at, column_w, wx)
            _fraction_row(
                rows, near, cumulative, hard, ramp, pair_at, i, row_w[y], column_at, column_w,
                wx, base, slope, fraction,
            )  # fmt: skip
            inside[:] = 0
            resin[:] = 1
            _stamp(part, column_at, column_ow, window[2], window[3], resin, inside)
            _sweep(
                inside, fraction, numbers, start[0], start[1] + y, start[2], key, weights, noise,
                head_start, carry[y], dithered[y], line[y & 1], line[(y + 1) & 1],
                above[(y + 2) % 3], above[y % 3], above[(y + 1) % 3], value, site,
            )  # fmt: skip
        else:
            dithered[y] = 0
        line[y & 1] = 0
        if y > 0:
            carry[y - 1] = above[(y + 2) % 3, 1 : n_columns + 1]
    carry[n_rows - 1] = above[(n_rows - 1) % 3, 1 : n_columns + 1]

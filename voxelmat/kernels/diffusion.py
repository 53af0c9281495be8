"""Three-dimensional error diffusion over any number of resins: one layer, from the one below.

Vector diffusion: each site lays the resin it owes most, and what it then owes of every resin is
passed on, 60 % within the layer by the weights 7, 3, 5, 1 over 16 (Floyd & Steinberg 1976, Proc.
SID 17:75-77) and 40 % to five sites of the next layer. A site next to one that cannot take its
share, outside or in a pure zone, passes that share straight up, so that nothing is lost at walls
and the share of each resin stays right. Serial by nature: a site needs those before it, and the
layer below.
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
    """What site `x`, of a blend of two or more resins, owes of each.

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
    share = np.float32(1.0) / np.float32(n)
    stray *= share
    for q in range(value.shape[0]):
        f = fraction[x, q]
        if f > _LEAST:
            value[q] += f + stray + first * (share - f)


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
def _shares(x, step, weights, open_before, open_here, open_next, out):
    """The share of each neighbour of site `x`, out f32 [9]; a closed one's goes straight up.

    weights f32 [6], the open flags u8 [columns + 2] of three rows.
    """
    out[0] = weights[0] if open_here[x + 1 + step] else np.float32(0.0)
    out[1] = weights[1] if open_next[x + 1 - step] else np.float32(0.0)
    out[2] = weights[2] if open_next[x + 1] else np.float32(0.0)
    out[3] = weights[3] if open_next[x + 1 + step] else np.float32(0.0)
    out[5] = weights[5] if open_before[x + 1] else np.float32(0.0)
    out[6] = weights[5] if open_next[x + 1] else np.float32(0.0)
    out[7] = weights[5] if open_here[x] else np.float32(0.0)
    out[8] = weights[5] if open_here[x + 2] else np.float32(0.0)
    within = out[0] + out[1] + out[2] + out[3]
    out[4] = np.float32(1.0) - within - (out[5] + out[6] + out[7] + out[8])


@njit(cache=True, nogil=True)
def _pass_on(value, chosen, x, step, share, line, following, before, above, after):
    """Spread what stays owed over the neighbours; arrays f32 [columns + 2, resins]."""
    for q in range(value.shape[0]):
        e = value[q] - (np.float32(1.0) if q == chosen else np.float32(0.0))
        line[x + 1 + step, q] += e * share[0]
        following[x + 1 - step, q] += e * share[1]
        following[x + 1, q] += e * share[2]
        following[x + 1 + step, q] += e * share[3]
        above[x + 1, q] += e * share[4]
        before[x + 1, q] += e * share[5]
        after[x + 1, q] += e * share[6]
        above[x, q] += e * share[7]
        above[x + 2, q] += e * share[8]


@njit(cache=True, nogil=True)
def _sweep(
    inside, open_before, open_here, open_next, fraction, numbers, layer, row, column, key,
    weights, noise, head_start, carry, dithered, line, following, before, above, after, site,
):  # fmt: skip
    """Lay the sites of one row, alternately from the left and from the right."""
    n_columns = inside.shape[0]
    value = np.empty(carry.shape[1], np.float32)
    share = np.empty(9, np.float32)
    step = 1 if ((layer >> 1) + row) & 1 == 0 else -1
    x = 0 if step == 1 else n_columns - 1
    for _ in range(n_columns):
        if open_here[x + 1]:
            first = head_start if dithered[x] == 0 else np.float32(0.0)
            _owed(fraction, line, carry, x, first, value)
            word = _site_word(layer, row, column + x, key)
            chosen = _most(fraction, x, value, word, noise)
            _shares(x, step, weights, open_before, open_here, open_next, share)
            _pass_on(value, chosen, x, step, share, line, following, before, above, after)
            site[x] = numbers[chosen]
        elif inside[x]:
            chosen = 0
            for q in range(1, value.shape[0]):
                chosen = q if fraction[x, q] > fraction[x, chosen] else chosen
            site[x] = numbers[chosen]
        dithered[x] = open_here[x + 1]
        x += step


@njit(cache=True, nogil=True)
def _open_row(inside, fraction, out):
    """Flag the sites of a row that lay a blend of two or more resins, out u8 [columns + 2]."""
    for x in range(inside.shape[0]):
        n = 0
        for q in range(fraction.shape[1]):
            n += 1 if fraction[x, q] > _LEAST else 0
        out[x + 1] = 1 if n > 1 and inside[x] else 0


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
    wx = np.empty(n_columns, np.float32)
    one = np.ones(n_columns, np.uint8)
    support = np.full(n_columns, numbers[n_resins], np.uint8)
    # Of the row before, this row and the next in turn: which sites are inside, which can take
    # what is passed on, their fractions, what is owed within the layer, and to the layer above.
    inside = np.zeros((3, n_columns), np.uint8)
    can_take = np.zeros((3, n_columns + 2), np.uint8)
    fraction = np.zeros((3, n_columns, n_resins), np.float32)
    line = np.zeros((3, n_columns + 2, n_resins), np.float32)
    above = np.zeros((3, n_columns + 2, n_resins), np.float32)
    at = -2
    # Rows go up in one layer and down in the next, so that no wall is always the first.
    row0, turn = (0, 1) if start[0] & 1 == 0 else (n_rows - 1, -1)
    for ahead in range(n_rows + 1):
        a, h, b = ahead % 3, (ahead + 2) % 3, (ahead + 1) % 3
        new, y = row0 + turn * ahead, row0 + turn * (ahead - 1)
        inside[a] = 0
        can_take[a] = 0
        line[a] = 0
        above[a] = 0
        if ahead < n_rows:
            sites[new] = 0
        if ahead < n_rows and window[0] <= new < window[1]:
            i = np.int64(row_at[new])
            has_part = _outline_row(outlines[0], i, row_ow[new], part)
            if _support_row(outlines, i, row_ow[new], part, both):
                _stamp(both, column_at, column_ow, window[2], window[3], support, sites[new])
            if has_part:
                _row_pair(lower, upper, layer_w, cumulative, i, at, rows)
                at = i
                _column_weights(hard[i], column_at, column_w, wx)
                _fraction_row(
                    rows, near, cumulative, hard, ramp, pair_at, i, row_w[new], column_at,
                    column_w, wx, base, slope, fraction[a],
                )  # fmt: skip
                _stamp(part, column_at, column_ow, window[2], window[3], one, inside[a])
                _open_row(inside[a], fraction[a], can_take[a])
        if ahead > 0:
            _sweep(
                inside[h], can_take[b], can_take[h], can_take[a], fraction[h], numbers,
                start[0], start[1] + y, start[2], key, weights, noise, head_start, carry[y],
                dithered[y], line[h], line[a], above[b], above[h], above[a], sites[y],
            )  # fmt: skip
        if ahead > 1:
            carry[y - turn] = above[b, 1 : n_columns + 1]
    carry[row0 + turn * (n_rows - 1)] = above[(n_rows - 1) % 3, 1 : n_columns + 1]

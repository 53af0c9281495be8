"""From two design planes to packed droplet bits: interpolate, threshold, pack, one row at a time.

All arrays are in image order: C-contiguous ``[layer, row, column]``. A printer row ``y`` lies
between design rows ``row_at[y]`` and ``row_at[y] + 1``, at weight ``row_w[y]`` from the first.
"""

import numpy as np
from numba import njit


@njit(cache=True, nogil=True)
def extend_plane(labels, at, keep, out):
    """Copy one plane of labels; a label that is not kept becomes that of its nearest neighbour.

    labels u16 [l, r, c] the plane `at` and the planes next to it, keep bool [palette], out u16
    [r, c]. Looks at the 26 neighbours, faces before edges before corners, low before high, so
    the result is unique; 0 where none is kept.
    """
    nl, nr, nc = labels.shape
    for j in range(nr):
        for k in range(nc):
            if keep[labels[at, j, k]]:
                out[j, k] = labels[at, j, k]
                continue
            found = 0
            best = 4
            for di in range(-1, 2):
                for dj in range(-1, 2):
                    for dk in range(-1, 2):
                        far = abs(di) + abs(dj) + abs(dk)
                        a, b, c = at + di, j + dj, k + dk
                        if far >= best or min(a, b, c) < 0 or a >= nl or b >= nr or c >= nc:
                            continue
                        if keep[labels[a, b, c]]:
                            best = far
                            found = labels[a, b, c]
            out[j, k] = found


@njit(cache=True, nogil=True)
def mark_interfaces(lower, upper, fractions, pure, step, out):
    """Flag the cells between eight voxels where blends meet an interface.

    lower, upper u16 [r, c] two label planes, fractions f32 [palette, resins], pure bool
    [palette], out u8 [r - 1, c - 1]. A cell is flagged where a corner is pure and another is
    not the same, or where a fraction differs by `step` or more between two corners.
    """
    n_resins = fractions.shape[1]
    corner = np.empty(8, np.int64)
    for j in range(out.shape[0]):
        for k in range(out.shape[1]):
            same = True
            for m in range(8):
                plane = lower if m < 4 else upper
                corner[m] = plane[j + (m >> 1 & 1), k + (m & 1)]
                same = same and corner[m] == corner[0]
            flag = 0
            if not same:
                for m in range(8):
                    if pure[corner[m]]:
                        flag = 1
                for q in range(n_resins):
                    low, high = np.float32(2.0), np.float32(-1.0)
                    for m in range(8):
                        if corner[m] > 0:
                            low = min(low, fractions[corner[m], q])
                            high = max(high, fractions[corner[m], q])
                    if high - low >= step:
                        flag = 1
            out[j, k] = flag


@njit(cache=True, nogil=True)
def blend_planes(lower, upper, w, out):
    """``out = lower + w * (upper - lower)``; all f32 [field, r, c]."""
    for f in range(lower.shape[0]):
        for j in range(lower.shape[1]):
            for k in range(lower.shape[2]):
                a = lower[f, j, k]
                out[f, j, k] = a + w * (upper[f, j, k] - a)


@njit(cache=True, nogil=True)
def _row_thresholds(mask, layer, row, column, skew_x, skew_y, out):
    """The thresholds of one printer row, tile by tile; a tile starts at whole multiples."""
    n = mask.shape[0]
    tile_y = row // n
    x = 0
    while x < out.shape[0]:
        at = column + x
        z = (layer + skew_x * (at // n) + skew_y * tile_y) % n
        start = at % n
        run = min(n - start, out.shape[0] - x)
        for q in range(run):
            out[x + q] = mask[z, row % n, start + q]
        x += run


@njit(cache=True, nogil=True)
def _outline_row(plane, i, w, out):
    """One interpolated row of an outline field; tells whether any of it is inside."""
    inside = False
    for k in range(plane.shape[1]):
        a = plane[i, k]
        v = a + w * (plane[i + 1, k] - a)
        out[k] = v
        inside = inside or v < 0
    return inside


@njit(cache=True, nogil=True)
def _stamp(outline, column_at, column_w, first, last, value, site):
    """Write ``value[x]`` into the sites of a row that lie inside an outline."""
    for x in range(first, last):
        j = column_at[x]
        a = outline[j]
        s = a + column_w[x] * (outline[j + 1] - a)
        site[x] = value[x] if s < 0 else site[x]


@njit(cache=True, nogil=True)
def _column_weights(hard, column_at, column_w, out):
    """Weights along a row, rounded to 0 or 1 (the nearest voxel) where a cell is flagged."""
    half = np.float32(0.5)
    for x in range(column_at.shape[0]):
        w = column_w[x]
        near = np.float32(1.0) if w >= half else np.float32(0.0)
        out[x] = near if hard[column_at[x]] else w


@njit(cache=True, nogil=True)
def _choose_resin(smooth, near, hard, i, w, column_at, wx, threshold, base, slope, out):
    """The resin number (from 1) of every site of a row, by its threshold.

    Where a cell is flagged `hard` the nearest plane's and row's values replace the interpolated
    ones; `wx` then picks the nearest column.
    """
    i_near = i + 1 if w >= np.float32(0.5) else i
    n_columns = smooth.shape[2]
    out[:] = 1
    for f in range(smooth.shape[0]):
        for k in range(n_columns):
            a = smooth[f, i, k]
            base[k] = a + w * (smooth[f, i + 1, k] - a)
        for k in range(n_columns - 1):
            slope[k] = base[k + 1] - base[k]
        for k in range(n_columns - 1):
            if hard[i, k]:
                a = near[f, i_near, k]
                base[k] = a
                slope[k] = near[f, i_near, k + 1] - a
        for x in range(column_at.shape[0]):
            j = column_at[x]
            out[x] += np.uint8(1) if threshold[x] >= base[j] + wx[x] * slope[j] else np.uint8(0)


@njit(cache=True, nogil=True)
def _pack(words, n_channels, y, bits):
    """Eight site bytes at a time to one bit byte a channel, the first site highest."""
    ones = np.uint64(0x0101010101010101)
    high = np.uint64(0x8080808080808080)
    for c in range(n_channels):
        wanted = np.uint64(c + 1) * ones
        for b in range(words.shape[0]):
            v = words[b] ^ wanted  # a byte is 0 where the site belongs to this channel
            v = ((high - v) & high) >> np.uint64(7)  # site numbers stay below 128: no borrow
            v |= v << np.uint64(9)  # gather the eight low bits in the highest byte, reversed
            v |= v << np.uint64(18)
            v |= v << np.uint64(36)
            bits[c, y, b] = np.uint8(v >> np.uint64(56))


@njit(cache=True, nogil=True)
def halftone_layer(
    outlines,
    smooth,
    near,
    hard,
    row_at,
    row_w,
    row_ow,
    column_at,
    column_w,
    column_ow,
    window,
    mask,
    start,
    skew_x,
    skew_y,
    bits,
):
    """Halftone one printer layer.

    Parameters: outlines f32 [1 or 2, r, c] (part, then part or support; negative inside),
    smooth and near f32 [resins - 1, r, c] cumulative fractions interpolated along layers and
    of the nearest plane, hard u8 [r - 1, c - 1], row_at u32 and row_w, row_ow f32 [rows]
    (weights for blends and for outlines), the same for columns, window i64 [4] first and last
    row and column that lie on the grid, mask f32 [n, n, n], start i64 [3] layer, row and
    column of the first pixel in the mask, bits u8 [channels, rows, stride] (out).
    """
    n_columns = column_at.shape[0]
    n_channels = bits.shape[0]
    n_resins = smooth.shape[0] + 1
    part = np.empty(outlines.shape[2], np.float32)
    both = np.empty(outlines.shape[2], np.float32)
    base = np.empty(outlines.shape[2], np.float32)
    slope = np.empty(outlines.shape[2], np.float32)
    threshold = np.empty(n_columns, np.float32)
    wx = np.empty(n_columns, np.float32)
    resin = np.empty(n_columns, np.uint8)
    support = np.full(n_columns, n_resins + 1, np.uint8)
    site = np.zeros(bits.shape[2] * 8, np.uint8)
    words = site.view(np.uint64)
    for y in range(row_at.shape[0]):
        i = row_at[y]
        on_grid = window[0] <= y < window[1]
        has_part = on_grid and _outline_row(outlines[0], i, row_ow[y], part)
        has_support = False
        if on_grid and outlines.shape[0] > 1 and _outline_row(outlines[1], i, row_ow[y], both):
            for k in range(part.shape[0]):  # without support the two fields are the same
                has_support = has_support or both[k] != part[k]
        if not (has_part or has_support):
            bits[:, y, :] = 0
            continue
        site[:] = 0
        if has_support:
            _stamp(both, column_at, column_ow, window[2], window[3], support, site)
        if has_part:
            _row_thresholds(mask, start[0], start[1] + y, start[2], skew_x, skew_y, threshold)
            _column_weights(hard[i], column_at, column_w, wx)
            _choose_resin(
                smooth, near, hard, i, row_w[y], column_at, wx, threshold, base, slope, resin
            )
            _stamp(part, column_at, column_ow, window[2], window[3], resin, site)
        _pack(words, n_channels, y, bits)

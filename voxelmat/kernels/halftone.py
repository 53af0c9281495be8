"""From two design planes to the sites of a layer: interpolate and threshold, one row at a time.

All arrays are in image order: C-contiguous ``[layer, row, column]``. A printer row ``y`` lies
between design rows ``row_at[y]`` and ``row_at[y] + 1``, at weight ``row_w[y]`` from the first.
"""

import numpy as np
from numba import njit

from voxelmat.kernels.sites import hash_row


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
    """``out = lower + w * (upper - lower)``; i8, i8, f32, f32 [field, r, c]."""
    for f in range(lower.shape[0]):
        for j in range(lower.shape[1]):
            for k in range(lower.shape[2]):
                a = np.float32(lower[f, j, k])
                out[f, j, k] = a + w * (np.float32(upper[f, j, k]) - a)


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
def _row_pair(lower, upper, w, cumulative, i, at, rows):
    """Cumulative fractions of design rows `i` and ``i + 1``, in ``rows[i & 1]`` and the other.

    lower, upper u16 [r, c], `w` from the first to the second, cumulative f32 [resins - 1,
    palette], rows f32 [2, resins - 1, c]; `at` is the i of the call before, above or below
    (-2: none), whose rows are kept where they serve.
    """
    for r in range(i, i + 2):
        if at <= r <= at + 1:
            continue
        for f in range(cumulative.shape[0]):
            for k in range(lower.shape[1]):
                a = cumulative[f, lower[r, k]]
                rows[r & 1, f, k] = a + w * (cumulative[f, upper[r, k]] - a)


@njit(cache=True, nogil=True)
def _row_line(rows, near, cumulative, hard, i, w, f, base, slope):
    """One cumulative fraction along a printer row: value at each voxel, and the step to the next.

    Where a cell is flagged `hard` the values of the nearest plane and row stand.
    """
    n_columns = base.shape[0]
    i_near = i + 1 if w >= np.float32(0.5) else i
    for k in range(n_columns):
        a = rows[i & 1, f, k]
        base[k] = a + w * (rows[(i + 1) & 1, f, k] - a)
    for k in range(n_columns - 1):
        slope[k] = base[k + 1] - base[k]
    for k in range(n_columns - 1):
        if hard[i, k]:
            a = cumulative[f, near[i_near, k]]
            base[k] = a
            slope[k] = cumulative[f, near[i_near, k + 1]] - a


@njit(cache=True, nogil=True)
def _ramp_line(ramp, hard, i, w, base):
    """The ramp of dithered interfaces along a printer row; tells whether the row has any."""
    found = False
    for k in range(hard.shape[1]):
        found = found or hard[i, k] > 1
    if found:
        for k in range(base.shape[0]):
            a = ramp[i, k]
            base[k] = a + w * (ramp[i + 1, k] - a)
    return found


@njit(cache=True, nogil=True)
def _choose(threshold, column_at, wx, base, slope, number, out):
    """Give the sites of a row whose threshold reaches a cumulative fraction the next resin."""
    for x in range(column_at.shape[0]):
        j = column_at[x]
        kept = out[x]  # read in any case, so that the loop has no branch and becomes vector code
        out[x] = number if threshold[x] >= base[j] + wx[x] * slope[j] else kept


@njit(cache=True, nogil=True)
def _choose_on_ramp(threshold, column_at, column_w, base, hard, ends, out):
    """Choose between the two resins of a dithered interface, ends u8 [pairs + 2, 2]."""
    for x in range(column_at.shape[0]):
        j = column_at[x]
        pair = hard[j]
        if pair > 1:
            first = np.float32(0.5) + (base[j] + column_w[x] * (base[j + 1] - base[j]))
            out[x] = ends[pair, 0] if threshold[x] < first else ends[pair, 1]


@njit(cache=True, nogil=True)
def _support_row(outlines, i, w, part, both):
    """Interpolate the field of part or support; tells whether there is support in the row."""
    found = False
    if outlines.shape[0] > 1 and _outline_row(outlines[1], i, w, both):
        for k in range(part.shape[0]):  # without support the two fields are the same
            found = found or both[k] != part[k]
    return found


@njit(cache=True, nogil=True)
def halftone_layer(
    outlines,
    lower,
    upper,
    near,
    layer_w,
    cumulative,
    numbers,
    hard,
    ramp,
    ends,
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
    key,
    sites,
):
    """Halftone one printer layer by thresholds.

    Parameters: outlines f32 [1 or 2, r, c] (part, then part or support; negative inside),
    lower, upper and near u16 [r, c] the label planes below, above and nearest, layer_w f32 from
    the first to the second, cumulative f32 [resins - 1, palette] fractions summed in the order
    of laying, numbers u8 [resins + 1] what a site of each resin holds (in that order, then
    support), hard u8 [r - 1, c - 1] (0 interpolate, 1 nearest, 1 + p the ramp of pair p), ramp
    f32 [r, c] distance from the interface over its width (positive towards the pair's first
    resin), ends u8 [pairs + 2, 2] what the sites of a pair hold, row_at u32 and row_w, row_ow
    f32 [rows] (weights for blends and for outlines), the same for columns, window i64 [4] first
    and last row and column that lie on the grid, mask f32 [n, n, n] (n = 0: white noise of
    `key` u64), start i64 [3] layer, row and column of the first pixel in the mask or on the
    tray, sites u8 [rows, columns or more] (out).
    """
    n_columns = column_at.shape[0]
    n_cells = outlines.shape[2]
    part = np.empty(n_cells, np.float32)
    both = np.empty(n_cells, np.float32)
    base = np.empty(n_cells, np.float32)
    slope = np.empty(n_cells, np.float32)
    rows = np.empty((2, cumulative.shape[0], n_cells), np.float32)
    threshold = np.empty(n_columns, np.float32)
    wx = np.empty(n_columns, np.float32)
    resin = np.empty(n_columns, np.uint8)
    support = np.full(n_columns, numbers[cumulative.shape[0] + 1], np.uint8)
    at = -2
    for y in range(row_at.shape[0]):
        i = np.int64(row_at[y])
        site = sites[y]
        site[:] = 0
        if not window[0] <= y < window[1]:
            continue
        has_part = _outline_row(outlines[0], i, row_ow[y], part)
        if _support_row(outlines, i, row_ow[y], part, both):
            _stamp(both, column_at, column_ow, window[2], window[3], support, site)
        if not has_part:
            continue
        if mask.shape[0] == 0:
            hash_row(start[0], start[1] + y, start[2], key, threshold)
        else:
            _row_thresholds(mask, start[0], start[1] + y, start[2], skew_x, skew_y, threshold)
        _row_pair(lower, upper, layer_w, cumulative, i, at, rows)
        at = i
        _column_weights(hard[i], column_at, column_w, wx)
        resin[:] = numbers[0]
        for f in range(cumulative.shape[0]):
            _row_line(rows, near, cumulative, hard, i, row_w[y], f, base, slope)
            _choose(threshold, column_at, wx, base, slope, numbers[f + 1], resin)
        if ramp.shape[0] > 0 and _ramp_line(ramp, hard, i, row_w[y], base):
            _choose_on_ramp(threshold, column_at, column_w, base, hard[i], ends, resin)
        _stamp(part, column_at, column_ow, window[2], window[3], resin, site)

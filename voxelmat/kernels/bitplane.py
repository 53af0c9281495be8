"""Counting and comparing packed one-bit planes: eight sites a byte, or 64 a word."""

import numpy as np
from numba import njit


@njit(cache=True, nogil=True)
def _ones(word):
    """Set bits of a u64 (the usual sideways addition)."""
    v = word - ((word >> np.uint64(1)) & np.uint64(0x5555555555555555))
    v = (v & np.uint64(0x3333333333333333)) + ((v >> np.uint64(2)) & np.uint64(0x3333333333333333))
    v = (v + (v >> np.uint64(4))) & np.uint64(0x0F0F0F0F0F0F0F0F)
    v += v >> np.uint64(8)
    v += v >> np.uint64(16)
    v += v >> np.uint64(32)
    return np.int64(v & np.uint64(0x7F))


@njit(cache=True, nogil=True)
def to_words(bits, words):
    """Bytes u8 [rows, stride] to words u64 [rows, ceil(stride / 8)], first pixel highest."""
    for y in range(bits.shape[0]):
        for w in range(words.shape[1]):
            v = np.uint64(0)
            for b in range(8):
                at = w * 8 + b
                v <<= np.uint64(8)
                if at < bits.shape[1]:
                    v |= np.uint64(bits[y, at])
            words[y, w] = v


@njit(cache=True, nogil=True)
def count_planes(planes, count):
    """Add the set bits of each plane of words u64 [channels, rows, words] to count i64."""
    for c in range(planes.shape[0]):
        total = 0
        for y in range(planes.shape[1]):
            for w in range(planes.shape[2]):
                total += _ones(planes[c, y, w])
        count[c] += total


@njit(cache=True, nogil=True)
def claims(planes, once, twice):
    """Sites claimed by any channel, and by more than one: once, twice u64 [rows, words]."""
    for y in range(planes.shape[1]):
        for w in range(planes.shape[2]):
            o = np.uint64(0)
            t = np.uint64(0)
            for c in range(planes.shape[0]):
                v = planes[c, y, w]
                t |= o & v
                o |= v
            once[y, w] = o
            twice[y, w] = t


@njit(cache=True, nogil=True)
def lone_sites(below, here, above, out):
    """Set sites of `here` that none of the six face neighbours joins; returns how many."""
    rows, words = here.shape
    total = 0
    for y in range(rows):
        for w in range(words):
            v = here[y, w]
            if v == 0:
                out[y, w] = 0
                continue
            near = (v >> np.uint64(1)) | (v << np.uint64(1)) | below[y, w] | above[y, w]
            if w > 0:
                near |= here[y, w - 1] << np.uint64(63)
            if w + 1 < words:
                near |= here[y, w + 1] >> np.uint64(63)
            if y > 0:
                near |= here[y - 1, w]
            if y + 1 < rows:
                near |= here[y + 1, w]
            out[y, w] = v & ~near
            total += _ones(out[y, w])
    return total


@njit(cache=True, nogil=True)
def first_site(plane):
    """Row and column of the first set bit of u64 [rows, words], or -1, -1."""
    for y in range(plane.shape[0]):
        for w in range(plane.shape[1]):
            v = plane[y, w]
            if v != 0:
                for b in range(64):
                    if (v >> np.uint64(63 - b)) & np.uint64(1):
                        return y, w * 64 + b
    return -1, -1


@njit(cache=True, nogil=True)
def _or_moved(a, pad, step, b):
    """``b = a | (a moved by step sites)`` on words [pad, -pad); the pads of both are the edge."""
    q, r = np.uint64(abs(step) >> 6), np.uint64(abs(step) & 63)
    rest = np.uint64(64) - r
    one = np.uint64(1)
    first, last = np.uint64(pad), np.uint64(a.shape[0] - pad)
    if r == 0:
        for w in range(first, last):
            b[w] = a[w] | (a[w + q] if step > 0 else a[w - q])
    elif step > 0:
        for w in range(first, last):
            b[w] = a[w] | (a[w + q] << r) | (a[w + q + one] >> rest)
    else:
        for w in range(first, last):
            b[w] = a[w] | (a[w - q] >> r) | (a[w - q - one] << rest)


@njit(cache=True, nogil=True)
def dilate_rows(plane, before, after, edge, out):
    """OR of every site with its `before` and `after` neighbours along a row.

    plane, out u64 [rows, words]; edge u64, all ones or 0, is what lies outside. First forwards,
    then backwards, each by doubling, so the work grows with the logarithm of the reach.
    """
    words = plane.shape[1]
    pad = max(before, after) // 64 + 2
    a, b = np.full(words + 2 * pad, edge), np.full(words + 2 * pad, edge)
    for y in range(plane.shape[0]):
        same = True
        for w in range(words):
            same = same and plane[y, w] == edge
        if same:
            out[y] = edge
            continue
        a[pad:-pad] = plane[y]
        for reach, sign in ((after, 1), (before, -1)):
            span = 1
            while span <= reach:
                step = min(span, reach + 1 - span)
                _or_moved(a, pad, sign * step, b)
                a, b = b, a
                span += step
        out[y] = a[pad:-pad]


@njit(cache=True, nogil=True)
def dilate_columns(plane, before, after, edge, out):
    """OR of every site with its `before` and `after` neighbours across rows; as `dilate_rows`."""
    rows, words = plane.shape
    a, b = plane.copy(), np.empty_like(plane)
    for reach, sign in ((after, 1), (before, -1)):
        span = 1
        while span <= reach:
            step = sign * min(span, reach + 1 - span)
            for y in range(rows):
                on_plane = 0 <= y + step < rows
                for w in range(words):
                    b[y, w] = a[y, w] | (a[y + step, w] if on_plane else edge)
            a, b = b, a
            span += abs(step)
    out[:] = a


@njit(cache=True, nogil=True)
def _ones_between(row, first, last):
    """Set bits of a row of words from bit `first` up to, without, bit `last`."""
    total = 0
    w = first >> 6
    while w << 6 < last:
        v = row[w]
        if v != 0:
            low, high = first - (w << 6), last - (w << 6)
            if low > 0:
                v = (v << np.uint64(low)) >> np.uint64(low)
            if high < 64:
                v = (v >> np.uint64(64 - high)) << np.uint64(64 - high)
            total += _ones(v)
        w += 1
    return total


@njit(cache=True, nogil=True)
def add_to_voxels(plane, row_at, row_share, whole, width, straddle, share, total):
    """Add the set sites of one plane to the design voxels that they overlap.

    plane u64 [rows, words]. row_at i64 [rows] the first voxel that a row of sites overlaps,
    row_share f64 [rows, 2] its share of that voxel and of the next. Along a row, whole i64
    [c, 2] first and last site that lie wholly in voxel c, each of share `width`; straddle i64
    [c] the site that also reaches into voxel c + 1, or -1, with share f64 [c, 2] in the two.
    total f64 [r, c] (added to) has an entry for every voxel named and the one after.
    """
    n = whole.shape[0]
    line = np.empty(total.shape[1])
    for y in range(plane.shape[0]):
        row = plane[y]
        used = False
        for w in range(row.shape[0]):
            used = used or row[w] != 0
        if not used:
            continue
        line[:] = 0.0
        for c in range(n):
            line[c] += width * _ones_between(row, whole[c, 0], whole[c, 1])
            x = straddle[c]
            if x >= 0 and (row[x >> 6] >> np.uint64(63 - (x & 63))) & np.uint64(1) != 0:
                line[c] += share[c, 0]
                line[c + 1] += share[c, 1]
        for i in range(2):
            part = row_share[y, i]
            if part > 0:
                for c in range(line.shape[0]):
                    total[row_at[y] + i, c] += part * line[c]

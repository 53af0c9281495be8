"""Counting and comparing packed one-bit planes: eight sites a byte, or 64 a word."""

import numpy as np
from numba import njit


@njit(cache=True, nogil=True)
def _ones(word):
    """Set bits of a u64 (the usual sideways addition)."""
    v = word - ((word >> np.uint64(1)) & np.uint64(0x5555555555555555))
    v = (v & np.uint64(0x3333333333333333)) + ((v >> np.uint64(2)) & np.uint64(0x3333333333333333))
    v = (v + (v >> np.uint64(4))) & np.uint64(0x0F0F0F0F0F0F0F0F)
    return np.int64((v * np.uint64(0x0101010101010101)) >> np.uint64(56))


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
def _moved(row, w, by, edge):
    """Word `w` of a row whose bit x is bit x + by of `row`, or of `edge` beyond its ends."""
    n = row.shape[0]
    q, r = by >> 6, by & 63  # floor division, so that r is never negative
    a = row[w + q] if 0 <= w + q < n else edge
    if r == 0:
        return a
    b = row[w + q + 1] if 0 <= w + q + 1 < n else edge
    return (a << np.uint64(r)) | (b >> np.uint64(64 - r))


@njit(cache=True, nogil=True)
def dilate_rows(plane, before, after, edge, out):
    """OR of every site with its `before` and `after` neighbours along a row.

    plane, out u64 [rows, words]; edge u64, all ones or 0, is what lies outside. First forwards,
    then backwards, each by doubling, so the work grows with the logarithm of the reach.
    """
    words = plane.shape[1]
    a, b = np.empty(words, np.uint64), np.empty(words, np.uint64)
    for y in range(plane.shape[0]):
        a[:] = plane[y]
        for reach, sign in ((after, 1), (before, -1)):
            span = 1
            while span <= reach:
                step = min(span, reach + 1 - span)
                for w in range(words):
                    b[w] = a[w] | _moved(a, w, sign * step, edge)
                a, b = b, a
                span += step
        out[y] = a


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
def add_to_voxels(bits, row_at, row_share, column_at, column_share, total):
    """Add the set sites of one plane to the design voxels that they overlap.

    bits u8 [rows, stride]; row_at i32 [rows] the first voxel that a row of sites overlaps,
    row_share f64 [rows, 2] the share of that voxel and of the next; the same for columns;
    total f64 [r, c] (added to) has an entry for every voxel named and the one after.
    """
    line = np.zeros(total.shape[1])
    for y in range(bits.shape[0]):
        used = False
        for b in range(bits.shape[1]):
            v = bits[y, b]
            if v == 0:
                continue
            used = True
            for q in range(8):
                if v >> (7 - q) & 1:
                    x = b * 8 + q
                    line[column_at[x]] += column_share[x, 0]
                    line[column_at[x] + 1] += column_share[x, 1]
        if used:
            for i in range(2):
                share = row_share[y, i]
                if share > 0:
                    for c in range(line.shape[0]):
                        total[row_at[y] + i, c] += share * line[c]
            line[:] = 0.0

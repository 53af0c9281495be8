"""Connected pieces of a stack, streamed layer by layer as runs of sites (6-neighbours).

A piece is a number in a union-find forest that grows as runs without a neighbour appear; only
the runs of the last layer are kept, so memory follows one layer and the number of pieces.
"""

import numpy as np
from numba import njit


@njit(cache=True, nogil=True)
def find_runs(plane, row_start, first, last):
    """Runs of set sites of u64 [rows, words]: first, last i32 [cap], last one past the end.

    row_start i64 [rows + 1] (out): runs of row y are row_start[y] to row_start[y + 1]. Returns
    the number of runs; those beyond `cap` are counted but not stored.
    """
    rows, words = plane.shape
    cap = first.shape[0]
    full = ~np.uint64(0)
    n = 0
    for y in range(rows):
        row_start[y] = n
        inside = False
        start = 0
        for w in range(words):
            v = plane[y, w]
            if (v == 0 and not inside) or (v == full and inside):
                continue
            for b in range(64):
                on = (v >> np.uint64(63 - b)) & np.uint64(1) != 0
                if on and not inside:
                    start = w * 64 + b
                elif inside and not on:
                    if n < cap:
                        first[n], last[n] = start, w * 64 + b
                    n += 1
                inside = on
        if inside:
            if n < cap:
                first[n], last[n] = start, words * 64
            n += 1
    row_start[rows] = n
    return n


@njit(cache=True, nogil=True)
def _root(parent, a):
    while parent[a] != a:
        parent[a] = parent[parent[a]]
        a = parent[a]
    return a


@njit(cache=True, nogil=True)
def _join(parent, a, b):
    """Unite two pieces under the older number."""
    a, b = _root(parent, a), _root(parent, b)
    low, high = min(a, b), max(a, b)
    parent[high] = low
    return low


@njit(cache=True, nogil=True)
def _touch(parent, piece, run, first, last, begin, end, o_first, o_last, o_piece):
    """Unite a run's piece (-1 for none yet) with those of the runs of a row that overlap it."""
    j = begin
    while j < end and o_last[j] <= first[run]:
        j += 1
    begin = j
    while j < end and o_first[j] < last[run]:
        if piece < 0:
            piece = _root(parent, o_piece[j])
        else:
            piece = _join(parent, piece, o_piece[j])
        j += 1
    return piece, begin


@njit(cache=True, nogil=True)
def link_layer(
    layer, row_start, first, last, piece, below_start, below_first, below_last, below_piece,
    parent, volume, place, touches, n_pieces, width,
):  # fmt: skip
    """Give every run of a layer its piece.

    below_* are the previous layer's runs. parent i64, volume i64, place i32 [.., 3] (column,
    row, layer of a first site), touches u8 (bit 0: layer 0, bit 1: a side of the window) must
    have room for n_pieces plus the runs of this layer. Returns the new n_pieces.
    """
    rows = row_start.shape[0] - 1
    for y in range(rows):
        near = row_start[y - 1] if y > 0 else 0
        under = below_start[y]
        for r in range(row_start[y], row_start[y + 1]):
            p = -1
            if y > 0:
                p, near = _touch(parent, p, r, first, last, near, row_start[y], first, last, piece)
            p, under = _touch(
                parent, p, r, first, last, under, below_start[y + 1], below_first, below_last,
                below_piece,
            )  # fmt: skip
            if p < 0:
                p = n_pieces
                n_pieces += 1
                parent[p] = p
                volume[p] = 0
                touches[p] = 0
                place[p, 0], place[p, 1], place[p, 2] = first[r], y, layer
            piece[r] = p
            volume[p] += last[r] - first[r]
            if layer == 0:
                touches[p] |= 1
            if y == 0 or y == rows - 1 or first[r] == 0 or last[r] >= width:
                touches[p] |= 2
    return n_pieces


@njit(cache=True, nogil=True)
def gather_pieces(parent, volume, touches, n_pieces):
    """Add everything known of a piece to its root; roots are those with parent[p] == p."""
    for p in range(n_pieces - 1, -1, -1):
        r = _root(parent, p)
        if r != p:
            volume[r] += volume[p]
            touches[r] |= touches[p]
            parent[p] = r

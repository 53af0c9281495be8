"""Widest ways out of a block: capped clearance, and a union-find over cells from wide to narrow."""

import numpy as np
from numba import njit

from voxelmat.kernels.bitplane import _ones_between


@njit(cache=True, nogil=True)
def count_cells(words, rows, columns, first_row, first_column, total):
    """Add the set sites of a plane of words u64 [rows, words] to its cells, total i32 [r, c].

    A cell has `rows` x `columns` sites; the first begins at first_row, first_column.
    """
    width = words.shape[1] * 64
    for i in range(total.shape[0]):
        for y in range(first_row + i * rows, min(first_row + (i + 1) * rows, words.shape[0])):
            row = words[y]
            for j in range(total.shape[1]):
                a = first_column + j * columns
                total[i, j] += _ones_between(row, a, min(a + columns, width))


@njit(cache=True, nogil=True)
def clearance_squared(solid, spacing, reach, out):
    """Squared distance from cell centres to the nearest solid one, exact up to its cap.

    solid u8 [l, r, c]; spacing f64 [3]; reach i64 [3] cells that are looked at to each side;
    out f32 like solid, at most (reach * spacing)^2 of the first axis. Beyond the block is empty.
    """
    nl, nr, nc = solid.shape
    cap = np.float32((reach[0] * spacing[0]) ** 2)
    line = np.empty(max(nl, nr, nc), np.float32)
    for i in range(nl):
        for j in range(nr):
            for k in range(nc):
                line[k] = np.float32(0) if solid[i, j, k] else cap
            _lower(line[:nc], spacing[2], reach[2], out[i, j])
    for i in range(nl):
        for k in range(nc):
            line[:nr] = out[i, :, k]
            _lower(line[:nr], spacing[1], reach[1], out[i, :, k])
    for j in range(nr):
        for k in range(nc):
            line[:nl] = out[:, j, k]
            _lower(line[:nl], spacing[0], reach[0], out[:, j, k])


@njit(cache=True, nogil=True)
def _lower(line, step, reach, out):
    """``out[i] = min over d of line[i + d] + (d * step)^2``, d within reach."""
    n = line.shape[0]
    out[:] = line
    for d in range(1, reach + 1):
        add = np.float32((d * step) ** 2)
        for i in range(n - d):
            out[i] = min(out[i], line[i + d] + add)
        for i in range(d, n):
            out[i] = min(out[i], line[i - d] + add)


@njit(cache=True, nogil=True)
def _top(parent, a):
    while parent[a] != a:
        parent[a] = parent[parent[a]]
        a = parent[a]
    return a


@njit(cache=True, nogil=True)
def sort_levels(level, order):
    """Cells of level u8 [n] from the highest level down, level 0 left out; order i32 (out)."""
    count = np.zeros(257, np.int64)
    for v in level:
        count[255 - v + 1] += 1
    for v in range(256):
        count[v + 1] += count[v]
    n = count[255]
    for cell in range(level.shape[0]):
        v = level[cell]
        if v:
            at = count[255 - v]
            order[at] = cell
            count[255 - v] = at + 1
    return n


@njit(cache=True, nogil=True)
def widest_ways(level, strides, order, n, parent, size, peak, least, events):
    """Flood from wide to narrow; note where each room first meets the outside.

    level u8 [cells] of a block with a border of 255 (the outside) round it; strides i64 [3];
    order i32 and n from `sort_levels`; parent i32 (all -1), size i32 and peak i32 [cells] for
    work. events i64 [cap, 4] (out): cell of the peak, cell of the meeting (-1 for a room without
    a way out), level there, cells of the room then. Rooms count whose peak exceeds the meeting by
    `least` or more. Returns how many there are; those beyond the cap are not stored.
    """
    found = 0
    for q in range(n):
        cell = order[q]
        parent[cell] = cell
        size[cell] = 1
        peak[cell] = cell
        inner = level[cell] < 255
        for s in range(6):
            step = strides[s >> 1] if s & 1 else -strides[s >> 1]
            other = cell + step
            if other < 0 or other >= parent.shape[0] or parent[other] < 0:
                continue
            if not inner and level[other] < 255:
                continue
            a, b = _top(parent, cell), _top(parent, other)
            if a == b:
                continue
            if level[peak[a]] < level[peak[b]]:
                a, b = b, a
            if level[peak[a]] == 255 and level[peak[b]] - level[cell] >= least:
                if found < events.shape[0]:
                    events[found, 0], events[found, 1] = peak[b], cell
                    events[found, 2], events[found, 3] = level[cell], size[b]
                found += 1
            parent[b] = a
            size[a] += size[b]
    for q in range(n):
        cell = order[q]
        if parent[cell] == cell and level[peak[cell]] < 255 and level[peak[cell]] >= least:
            if found < events.shape[0]:
                events[found, 0], events[found, 1] = peak[cell], -1
                events[found, 2], events[found, 3] = 0, size[cell]
            found += 1
    return found

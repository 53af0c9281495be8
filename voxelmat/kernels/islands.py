"""What hangs free from one layer to the next, and pieces of a layer that begin in mid-air."""

from numba import njit

from voxelmat.kernels.bitplane import _ones, _ones_between
from voxelmat.kernels.components import _join, _root


@njit(cache=True, nogil=True)
def find_islands(row_start, first, last, below, parent, held, area, out):
    """Pieces (4-neighbours) of a layer's runs without a set site of `below` under them.

    row_start i64, first and last i32 as `find_runs` gives them; below u64 [rows, words]; parent
    i64, held u8, area i64 [runs] for work. out i64 [cap, 3]: sites, row and column of a site.
    Returns how many; those beyond the cap are counted, not stored.
    """
    rows = row_start.shape[0] - 1
    n = row_start[rows]
    for y in range(rows):
        j = row_start[y - 1] if y > 0 else 0
        for r in range(row_start[y], row_start[y + 1]):
            parent[r] = r
            area[r] = last[r] - first[r]
            held[r] = 1 if _ones_between(below[y], first[r], last[r]) > 0 else 0
            if y == 0:
                continue
            while j < row_start[y] and last[j] <= first[r]:
                j += 1
            i = j
            while i < row_start[y] and first[i] < last[r]:
                _join(parent, i, r)
                i += 1
    for r in range(n):
        top = _root(parent, r)
        if top != r:
            area[top] += area[r]
            held[top] |= held[r]
    found = 0
    for y in range(rows):
        for r in range(row_start[y], row_start[y + 1]):
            if parent[r] == r and held[r] == 0:
                if found < out.shape[0]:
                    out[found, 0], out[found, 1], out[found, 2] = area[r], y, first[r]
                found += 1
    return found


@njit(cache=True, nogil=True)
def count_hanging(here, below):
    """Set sites of `here`, and those of them above none of `below`; u64 [rows, words]."""
    sites = 0
    hanging = 0
    for y in range(here.shape[0]):
        for w in range(here.shape[1]):
            v = here[y, w]
            if v != 0:
                sites += _ones(v)
                hanging += _ones(v & ~below[y, w])
    return sites, hanging

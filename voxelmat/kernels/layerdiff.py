"""How many sites two packed planes differ in."""

import numpy as np
from numba import njit

from voxelmat.kernels.bitplane import _ones


@njit(cache=True, nogil=True)
def count_difference(a, b):
    """Sites set in one of two planes u64 [rows, words] and not in the other."""
    total = np.int64(0)
    for y in range(a.shape[0]):
        for w in range(a.shape[1]):
            v = a[y, w] ^ b[y, w]
            if v != 0:
                total += _ones(v)
    return total

"""Sites that differ between two packed planes, against plain booleans."""

import numpy as np

from voxelmat.kernels.layerdiff import count_difference


def test_differences_are_those_of_booleans():
    draw = np.random.default_rng(3)
    a, b = draw.integers(0, 2**64, (2, 5, 3), dtype=np.uint64)
    b[2] = a[2]
    plain = np.unpackbits((a ^ b).view(np.uint8)).sum()
    assert count_difference(a, b) == plain > 0
    assert count_difference(a, a) == 0

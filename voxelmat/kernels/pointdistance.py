"""Distance from single points to the nearest triangle, by the tree of thick discs."""

import math

import numpy as np
from numba import njit

from voxelmat.kernels.nearest import _nearest


@njit(cache=True, nogil=True, error_model="numpy")
def point_distances(discs, triangles, leaf, points, out):
    """Distance of each point to the nearest triangle.

    Parameters
    ----------
    discs : (2 * leaves - 1, 8) float64
    triangles : (m, 12) float64
        Both as in `voxelmat.kernels.nearest.signed_distance`.
    leaf : int
    points : (n, 3) float64
        In the unit of the triangles; neighbours in the list should be neighbours in space.
    out : (n,) float64
        Filled, without a sign.
    """
    stack = np.empty(64, np.int32)
    reach = np.empty(64)
    guess = 0
    for n in range(points.shape[0]):
        least, guess = _nearest(
            discs, triangles, leaf, points[n, 0], points[n, 1], points[n, 2],
            1.0, np.inf, guess, stack, reach,
        )  # fmt: skip
        out[n] = math.sqrt(least)

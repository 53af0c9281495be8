"""Density filter: the cone-weighted mean of a field within a radius in mm."""

from __future__ import annotations

import itertools
import math

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.kernels.cone import neighbour_sum
from voxelmat.monitor import computing

__all__ = ["ConeFilter", "cone_weights"]

_MOST_NEIGHBOURS = 40_000  # beyond this a step takes minutes; the radius is surely in a wrong unit


def cone_weights(
    spacing: tuple[float, float, float], radius: float
) -> tuple[NDArray[np.float64], NDArray[np.int64]]:
    """Weights ``radius - distance`` and the offsets (along z, y, x) that they belong to.

    Parameters
    ----------
    spacing : tuple of float
        Voxel edge along x, y, z, mm.
    radius : float
        Radius of the cone, mm. Below the smallest spacing only the voxel itself remains.

    Returns
    -------
    weights : ndarray of float, (n,)
        In mm, all positive.
    offsets : ndarray of int, (n, 3)
    """
    if not (math.isfinite(radius) and radius > 0):
        raise InputError(f"The filter radius must be a positive number of mm; got {radius!r}.")
    reach = [int(radius / h) for h in spacing[::-1]]
    if math.prod(2 * r + 1 for r in reach) > _MOST_NEIGHBOURS:
        raise InputError(
            f"A filter radius of {radius:g} mm spans {reach[::-1]} voxels a side along x, y, z; "
            "use a smaller radius or larger voxels."
        )
    found = [
        (radius - distance, offset)
        for offset in itertools.product(*(range(-r, r + 1) for r in reach))
        if (distance := math.hypot(*(o * h for o, h in zip(offset, spacing[::-1], strict=True))))
        < radius
    ]
    weights = np.array([w for w, _ in found])
    return weights, np.array([o for _, o in found], dtype=np.int64).reshape(-1, 3)


class ConeFilter:
    """Linear map x -> (H x) / (H 1) on the voxels of a domain; zero elsewhere.

    The mean is taken over the domain only, so a field of ones stays a field of ones up to the
    shape's surface.

    Parameters
    ----------
    domain : ndarray of bool, (nz, ny, nx)
        Voxels that take part.
    spacing : tuple of float
        Voxel edge along x, y, z, mm.
    radius : float
        mm.
    periodic : bool
        The grid repeats itself along all three axes, as a cell does.
    empty_beyond : bool
        What is not of the domain counts as 0, instead of not at all: walls at the shape's surface
        are then no thinner than those inside (A. Clausen & E. Andreassen, Struct. Multidisc.
        Optim. 56 (2017) 1147, from memory). A field of ones falls to about one half there.

    References
    ----------
    Bruns, T. E. and Tortorelli, D. A., Topology optimization of non-linear elastic structures
    and compliant mechanisms, Comput. Methods Appl. Mech. Eng. 190 (2001) 3443-3459.
    """

    def __init__(
        self,
        domain: NDArray[np.bool_],
        spacing: tuple[float, float, float],
        radius: float,
        *,
        periodic: bool = False,
        empty_beyond: bool = False,
    ) -> None:
        self.domain = np.ascontiguousarray(domain, dtype=bool)
        self._inside = self.domain.astype(np.float64)
        self._weights, self._offsets = cone_weights(spacing, radius)
        reach = np.abs(self._offsets).max(axis=0) if periodic else np.zeros(3, dtype=int)
        self._reach = tuple(int(n) for n in reach)
        self.empty_beyond = empty_beyond
        total = self._sum(self._inside)
        if empty_beyond:
            total = np.full_like(total, self._weights.sum())
        self._scale = np.divide(self._inside, total, out=np.zeros_like(total), where=total > 0)

    def _sum(self, x: NDArray[np.float64]) -> NDArray[np.float64]:
        if any(self._reach):
            x = np.pad(x, [(n, n) for n in self._reach], mode="wrap")
        out = np.empty_like(x)
        with computing():
            neighbour_sum(x, self._weights, self._offsets, out)
        inner = tuple(slice(n, m - n) for n, m in zip(self._reach, x.shape, strict=True))
        return out[inner]

    def __call__(self, x: NDArray[np.float64]) -> NDArray[np.float64]:
        """Filter a field of shape (nz, ny, nx)."""
        return self._sum(np.ascontiguousarray(x * self._inside)) * self._scale

    def transpose(self, cotangent: NDArray[np.float64]) -> NDArray[np.float64]:
        """Carry the derivative with respect to the filtered field back to the field."""
        return self._sum(np.ascontiguousarray(cotangent * self._scale)) * self._inside

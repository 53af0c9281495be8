"""Stiffness of voxels times displacement, wrapped: the matrix that is never built."""

from __future__ import annotations

from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.element import DEFAULT, Spacing, kernel_constants
from voxelmat.kernels.operator import apply_stiffness
from voxelmat.kernels.threads import threads
from voxelmat.kernels.vector import add_product, plane_dots

__all__ = ["Product", "Stiffness", "check_moduli", "dot", "planes", "touched_nodes"]

Floats = NDArray[Any]


def planes(a: NDArray[Any]) -> NDArray[Any]:
    """View of a node field ``[3, nk, nj, ni]`` as ``[3 nk, nj ni]``."""
    return a.reshape(a.shape[0] * a.shape[1], -1)


def dot(a: Floats, b: Floats) -> float:
    """Sum of products of two node fields: the same bits for any number of threads."""
    sums = np.empty(a.shape[0] * a.shape[1])
    plane_dots(planes(a), planes(b), sums)
    return float(sums.sum())


def check_moduli(lam: NDArray[np.float64], mu: NDArray[np.float64]) -> None:
    """Raise `InputError` where Lame constants are not those of a stable or an empty voxel.

    A voxel is empty where both are exactly 0; elsewhere mu > 0 and lam > -2 mu / 3 (a bulk
    modulus above 0).
    """
    if lam.shape != mu.shape or lam.ndim != 3 or 0 in lam.shape:
        raise InputError(
            f"lam and mu must be 3-D and of one shape; got {lam.shape} and {mu.shape}."
        )
    empty = (lam == 0) & (mu == 0)
    sound = (mu > 0) & (3 * lam + 2 * mu > 0) & (lam < 1e12) & (mu < 1e12)
    bad = np.argwhere(~(empty | sound))
    if len(bad):
        k, j, i = (int(n) for n in bad[0])
        raise InputError(
            f"{len(bad)} voxels have impossible stiffness, the first at voxel ({i}, {j}, {k}): "
            f"lambda {lam[k, j, i]:g}, mu {mu[k, j, i]:g} MPa. Both must be 0 (empty), or mu > 0 "
            f"and lambda > -2 mu / 3 and both below 1e12 MPa (a Poisson's ratio below 0.5)."
        )


def touched_nodes(voxels: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Nodes ``[nz+1, ny+1, nx+1]`` that touch a True voxel of ``[nz, ny, nx]``."""
    out = np.zeros(tuple(n + 1 for n in voxels.shape), dtype=bool)
    nz, ny, nx = voxels.shape
    for a in range(8):
        x, y, z = a & 1, a >> 1 & 1, a >> 2
        out[z : z + nz, y : y + ny, x : x + nx] |= voxels
    return out


class Product(Protocol):
    """A stiffness as a product, whatever it is made of."""

    def apply(self, u: Floats, y: Floats) -> None:
        """Write K u to y."""

    @property
    def nbytes(self) -> int:
        """Memory held, bytes."""


class Stiffness:
    """K of one grid of voxels, plus springs to ground, as a product.

    Parameters
    ----------
    lam, mu : ndarray, shape (nz, ny, nx)
        Lame constants, MPa; 0 in empty voxels. Their float type (float64 or float32) is that of
        the vectors.
    spacing : tuple of float
        Voxel edge along x, y, z, mm.
    element : str
        Formulation, see `voxelmat.fea.element`.
    springs : ndarray or None, shape (3, nz+1, ny+1, nx+1)
        Stiffness to ground at each node and direction, N/mm.
    """

    def __init__(
        self,
        lam: Floats,
        mu: Floats,
        spacing: Spacing,
        element: str = DEFAULT,
        springs: Floats | None = None,
    ) -> None:
        self.lam = np.ascontiguousarray(lam)
        self.mu = np.ascontiguousarray(mu, dtype=self.lam.dtype)
        self.springs = None if springs is None else np.ascontiguousarray(springs, self.lam.dtype)
        self.constants = kernel_constants(spacing, element, self.lam.dtype)
        self.shape = (3, *(n + 1 for n in self.lam.shape))

    def apply(self, u: Floats, y: Floats) -> None:
        """Write K u to y; both C-contiguous, of the same float type as the moduli."""
        chunks = threads()
        apply_stiffness(u, self.lam, self.mu, y, self.constants, chunks)
        if self.springs is not None:
            add_product(planes(self.springs), planes(u), planes(y))

    @property
    def nbytes(self) -> int:
        """Memory held, bytes."""
        extra = 0 if self.springs is None else self.springs.nbytes
        return int(self.lam.nbytes + self.mu.nbytes + extra)

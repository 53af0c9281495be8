"""One level of the scalar multigrid: a product, its inverse diagonal and Chebyshev smoothing."""

from __future__ import annotations

from abc import ABC, abstractmethod
from typing import Any

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from voxelmat.fea.operator import dot
from voxelmat.fea.scalar_element import Spacing, modal_factors
from voxelmat.kernels.scalar import apply_scalar, smooth_scalar
from voxelmat.kernels.scalar_coarse import apply_stencil_scalar
from voxelmat.kernels.threads import threads
from voxelmat.kernels.vector import add_product

__all__ = ["Conduction", "ScalarLevel", "StencilScalarLevel", "VoxelScalarLevel", "rows"]

Floats = NDArray[Any]
Single = NDArray[np.float32]

_LANCZOS_STEPS, _LANCZOS_MARGIN = 12, 1.05


def rows(a: Floats) -> Floats:
    """View of a node field ``[1, nk, nj, ni]`` or ``[nk, nj, ni]`` as ``[nk, nj ni]``."""
    return a.reshape(a.shape[-3], -1)


class Conduction:
    """Conduction, capacity and a diagonal of one grid of voxels as a product.

    Parameters
    ----------
    conductivity, capacity : ndarray, shape (nz, ny, nx)
        mW/(mm K) and, for a transient, mW/(mm^3 K) after division by the time step; None for a
        steady field. Their float type is that of the vectors.
    spacing : tuple of float
        mm.
    kind : str
        See `voxelmat.fea.scalar_element.CAPACITIES`.
    diagonal : ndarray or None, shape (nz+1, ny+1, nx+1)
        Heat a degree that each node loses to its surroundings, mW/K.
    """

    def __init__(
        self,
        conductivity: Floats,
        capacity: Floats | None,
        spacing: Spacing,
        kind: str,
        diagonal: Floats | None,
    ) -> None:
        dtype = conductivity.dtype
        self.k = np.ascontiguousarray(conductivity)
        self.c = self.k if capacity is None else np.ascontiguousarray(capacity, dtype)
        self.diagonal = None if diagonal is None else np.ascontiguousarray(diagonal, dtype)
        p, q = modal_factors(spacing, kind)
        self.p, self.q = p.astype(dtype), (q * (capacity is not None)).astype(dtype)

    def apply(self, u: Floats, y: Floats) -> None:
        """Write A u to y; both C-contiguous ``[1, nk, nj, ni]`` of the float type of the fields."""
        chunks = int(threads())
        apply_scalar(u[0], self.k, self.c, y[0], self.p, self.q, chunks)
        if self.diagonal is not None:
            add_product(rows(self.diagonal), rows(u), rows(y))

    @property
    def nbytes(self) -> int:
        """Memory held, bytes."""
        more = 0 if self.c is self.k else self.c.nbytes
        more += 0 if self.diagonal is None else self.diagonal.nbytes
        return int(self.k.nbytes + more)


class ScalarLevel(ABC):
    """One grid: a product, its inverse diagonal and the vectors of the cycle.

    Fields are ``[1, nk, nj, ni]``, so that they fit the conjugate gradients of displacements.
    """

    def __init__(self, diagonal: Floats, free: NDArray[np.bool_]) -> None:
        inverse = np.zeros(diagonal.shape)
        np.divide(1.0, diagonal, out=inverse, where=free & (diagonal > 0))
        self.B: Single = inverse[None].astype(np.float32)
        self.shape = self.B.shape
        self.x, self.b, self.d, self.y = (np.zeros(self.shape, np.float32) for _ in range(4))
        self.steps: list[tuple[np.float32, np.float32]] = []

    @property
    def nodes(self) -> int:
        """Nodes of the grid."""
        return int(self.B.size)

    @abstractmethod
    def product(self, x: Single, y: Single) -> None:
        """Write A x to y."""

    @property
    def nbytes(self) -> int:
        """Memory of the vectors, bytes."""
        return int(5 * self.B.nbytes)

    def smooth(self, from_zero: bool) -> None:
        """Chebyshev smoothing of A x = b."""
        b, y, B, x, d = (rows(v) for v in (self.b, self.y, self.B, self.x, self.d))
        for n, (a, c) in enumerate(self.steps):
            first = n == 0 and from_zero
            if not first:
                self.product(self.x, self.y)
            smooth_scalar(b, y, B, x, d, a, c, first)

    def choose_steps(self, degree: int, ratio: float) -> None:
        """Set the polynomial, damping eigenvalues of B A from its largest down to 1 / ratio of it.

        Source: Y. Saad, Iterative Methods for Sparse Linear Systems (2003), algorithm 12.1.
        """
        top = self._largest()
        centre, half = top * (1 + 1 / ratio) / 2, top * (1 - 1 / ratio) / 2
        sigma = centre / half
        rho = 1 / sigma
        steps = [(0.0, 1 / centre)]
        for _ in range(degree - 1):
            last, rho = rho, 1 / (2 * sigma - rho)
            steps.append((rho * last, 2 * rho / half))
        self.steps = [(np.float32(a), np.float32(c)) for a, c in steps]

    def _largest(self) -> float:
        """Upper Ritz value of sqrt(B) A sqrt(B) with a margin, by the Lanczos process."""
        root = np.sqrt(self.B)
        v = np.random.default_rng(1).standard_normal(self.shape).astype(np.float32) * (root > 0)
        old = np.zeros_like(v)
        work, w = np.empty_like(v), np.empty_like(v)
        norm = float(np.sqrt(dot(v, v)))
        alpha: list[float] = []
        beta: list[float] = []
        while norm > 1e-5 and len(alpha) < _LANCZOS_STEPS:
            v *= np.float32(1 / norm)
            np.multiply(root, v, out=work)
            self.product(work, w)
            w *= root
            alpha.append(dot(w, v))
            w -= np.float32(alpha[-1]) * v
            if len(alpha) > 1:
                beta.append(norm)
                w -= np.float32(norm) * old
            old, v, w = v, w, old
            norm = float(np.sqrt(dot(v, v)))
        if not alpha:
            return 1.0
        ritz = scipy.linalg.eigvalsh_tridiagonal(np.array(alpha), np.array(beta))
        return _LANCZOS_MARGIN * float(ritz[-1])


class VoxelScalarLevel(ScalarLevel):
    """The grid of voxels, applied without a matrix in single precision."""

    def __init__(self, operator: Conduction, diagonal: Floats, free: NDArray[np.bool_]) -> None:
        super().__init__(diagonal, free)
        self.operator = operator

    def product(self, x: Single, y: Single) -> None:
        """A x by sums and differences."""
        self.operator.apply(x, y)

    @property
    def nbytes(self) -> int:
        """Memory held, bytes."""
        return super().nbytes + self.operator.nbytes


class StencilScalarLevel(ScalarLevel):
    """A coarse grid with its Galerkin stencils ``[nk, nj, 27, ni]``."""

    def __init__(self, S: Single) -> None:
        centre = S[:, :, 13]
        super().__init__(centre, centre > 0)
        self.S = S

    def product(self, x: Single, y: Single) -> None:
        """S x."""
        apply_stencil_scalar(self.S, x[0], y[0])

    @property
    def nbytes(self) -> int:
        """Memory held, bytes."""
        return super().nbytes + int(self.S.nbytes)

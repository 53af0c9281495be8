"""One level of the multigrid: a product, its inverse nodal blocks, and Chebyshev smoothing."""

from __future__ import annotations

from abc import ABC, abstractmethod

import numpy as np
from numpy.typing import NDArray

from voxelmat.fea.element import Spacing, corner_blocks, kernel_constants
from voxelmat.fea.operator import Stiffness, dot
from voxelmat.kernels.blocks import stencil_inverses, voxel_inverses
from voxelmat.kernels.stencil import apply_stencil
from voxelmat.kernels.vector import smooth_first, smooth_next

__all__ = ["Level", "StencilLevel", "VoxelLevel"]

Single = NDArray[np.float32]

_LANCZOS_STEPS, _LANCZOS_MARGIN = 14, 1.05


class Level(ABC):
    """One grid: a product, its inverse nodal blocks and the vectors of the cycle."""

    def __init__(self, shape: tuple[int, ...]) -> None:
        self.shape = shape
        self.B: Single = np.zeros((6, *shape[1:]), dtype=np.float32)
        self.steps: list[tuple[np.float32, np.float32]] = []

    @property
    def nodes(self) -> int:
        """Nodes of the grid."""
        return int(np.prod(self.shape[1:]))

    def allocate(self) -> None:
        """Make the work vectors."""
        self.x, self.b, self.d, self.y = (np.zeros(self.shape, np.float32) for _ in range(4))

    @abstractmethod
    def product(self, x: Single, y: Single) -> None:
        """Write A x to y."""

    @property
    def nbytes(self) -> int:
        """Memory of the vectors and blocks, bytes."""
        return int(self.B.nbytes + 4 * 4 * np.prod(self.shape))

    def flat(self, a: Single) -> Single:
        """View as ``[c, planes, n]``."""
        return a.reshape(a.shape[0], a.shape[1], -1)

    def smooth(self, from_zero: bool) -> None:
        """Chebyshev smoothing of A x = b."""
        flat = self.flat
        for n, (a, c) in enumerate(self.steps):
            if n == 0 and from_zero:
                smooth_first(flat(self.b), flat(self.B), flat(self.x), flat(self.d), c)
            else:
                self.product(self.x, self.y)
                smooth_next(
                    flat(self.b), flat(self.y), flat(self.B), flat(self.x), flat(self.d), a, c
                )

    def choose_steps(self, degree: int, ratio: float) -> None:
        """Set the polynomial from a bound on the largest eigenvalue of B A (Lanczos)."""
        top = self._largest()
        low = top / ratio
        centre, half = (top + low) / 2, (top - low) / 2
        sigma = centre / half
        rho = 1 / sigma
        steps = [(0.0, 1 / centre)]
        for _ in range(degree - 1):
            last, rho = rho, 1 / (2 * sigma - rho)
            steps.append((rho * last, 2 * rho / half))
        self.steps = [(np.float32(a), np.float32(c)) for a, c in steps]

    def _largest(self) -> float:
        """Upper Ritz value of B A with a margin, by conjugate gradients from a random start.

        A power iteration falls short at high contrast, and the polynomial then amplifies.
        """
        exists = self.B[:3] > 0
        rng = np.random.default_rng(1)
        r = rng.standard_normal(self.shape).astype(np.float32)
        r = np.where(exists, r / np.sqrt(np.where(exists, self.B[:3], 1)), 0).astype(np.float32)
        p, q, z, work = np.zeros_like(r), np.empty_like(r), np.empty_like(r), np.empty_like(r)
        alpha: list[float] = []
        beta: list[float] = []
        first = old = 0.0
        for n in range(min(_LANCZOS_STEPS, int(exists.sum()))):
            smooth_first(*(self.flat(v) for v in (r, self.B, z, work)), np.float32(1))
            new = dot(r, z)
            first = first or new
            if not new > 1e-10 * first:
                break
            p *= np.float32(new / old if n else 0.0)
            p += z
            self.product(p, q)
            q *= exists
            curvature = dot(p, q)
            if not curvature > 0:
                break
            beta.append(new / old if n else 0.0)
            alpha.append(new / curvature)
            r -= np.float32(alpha[-1]) * q
            old = new
        return _LANCZOS_MARGIN * _top_ritz(alpha, beta)


def _top_ritz(alpha: list[float], beta: list[float]) -> float:
    """Largest eigenvalue of the Lanczos matrix behind the steps of conjugate gradients."""
    n = len(alpha)
    if n == 0:
        return 1.0
    T = np.zeros((n, n))
    for i in range(n):
        T[i, i] = 1 / alpha[i] + (beta[i] / alpha[i - 1] if i else 0.0)
        if i:
            T[i, i - 1] = T[i - 1, i] = np.sqrt(beta[i]) / alpha[i - 1]
    return float(np.linalg.eigvalsh(T)[-1])


class VoxelLevel(Level):
    """A grid of voxels, applied without a matrix."""

    def __init__(
        self,
        lam: NDArray[np.float64],
        mu: NDArray[np.float64],
        spacing: Spacing,
        element: str,
        free: NDArray[np.uint8],
        springs: NDArray[np.float64] | None,
    ) -> None:
        super().__init__(free.shape)
        none = np.zeros((3, 0, 0, 0))
        voxel_inverses(
            lam,
            mu,
            none if springs is None else springs,
            kernel_constants(spacing, element),
            corner_blocks(spacing, element),
            free,
            self.B,
        )
        self.operator = Stiffness(
            lam.astype(np.float32), mu.astype(np.float32), spacing, element, springs
        )

    def product(self, x: Single, y: Single) -> None:
        """K x by sums and differences."""
        self.operator.apply(x, y)

    @property
    def nbytes(self) -> int:
        """Memory held, bytes."""
        return super().nbytes + self.operator.nbytes


class StencilLevel(Level):
    """A coarse grid with its Galerkin stencils."""

    def __init__(self, S: Single) -> None:
        nk, nj, _, ni = S.shape
        super().__init__((3, nk, nj, ni))
        self.S = S
        stencil_inverses(S, self.B)

    def product(self, x: Single, y: Single) -> None:
        """S x by stencils."""
        apply_stencil(self.S, x, y)

    @property
    def nbytes(self) -> int:
        """Memory held, bytes."""
        return super().nbytes + self.S.nbytes

"""The coarsest level of the multigrid as a dense matrix, factorised once."""

from __future__ import annotations

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from voxelmat.fea.levels import Level

__all__ = ["Coarsest"]

# Added to the matrix after it was scaled to a unit diagonal: makes free rigid motions solvable.
_SHIFT = 1e-6


def _dense(level: Level) -> NDArray[np.float64]:
    """The matrix behind `level`, from products with 81 combs of unit vectors.

    A node couples only with its direct neighbours, so nodes three apart share one product.
    """
    size = int(np.prod(level.shape))
    nodes = np.arange(size).reshape(level.shape)
    A = np.zeros((size, size))
    x, y = np.zeros(level.shape, np.float32), np.empty(level.shape, np.float32)
    index = [np.arange(n) for n in level.shape[1:]]
    for comb in np.ndindex(3, 3, 3):
        # The comb's tooth within one node of each node, along each axis.
        teeth = [i - ((i - o + 1) % 3 - 1) for i, o in zip(index, comb, strict=True)]
        near = [
            np.flatnonzero((t >= 0) & (t < n)) for t, n in zip(teeth, level.shape[1:], strict=True)
        ]
        if any(o >= n for o, n in zip(comb, level.shape[1:], strict=True)):
            continue
        rows = np.ix_(np.arange(3), *near)
        columns = np.ix_(np.arange(1), *(t[n] for t, n in zip(teeth, near, strict=True)))
        for d in range(3):
            x[:] = 0
            x[d, comb[0] :: 3, comb[1] :: 3, comb[2] :: 3] = 1
            level.product(x, y)
            at = np.broadcast_to(nodes[d][columns[1:]], nodes[rows].shape)
            A[nodes[rows], at] = y[rows]
    return A


class Coarsest:
    """A direct solve, steady also where the coarsest grid is singular.

    Parameters
    ----------
    level : Level
    matrix : ndarray of float64, optional
        The matrix behind the level, overwritten; by default it is found from products.
    """

    def __init__(self, level: Level, matrix: NDArray[np.float64] | None = None) -> None:
        A = _dense(level) if matrix is None else matrix
        exists = (level.B[:3] > 0).ravel()
        A[~exists] = 0
        A[:, ~exists] = 0
        A = (A + A.T) / 2
        diagonal = np.where(exists, np.diag(A), 1.0)
        scale = np.where(exists, 1 / np.sqrt(np.where(diagonal > 0, diagonal, 1.0)), 0.0)
        A *= scale[:, None] * scale
        A[np.diag_indices_from(A)] = 1.0 + _SHIFT
        try:
            lower = scipy.linalg.cholesky(A, lower=True, overwrite_a=True, check_finite=False)
            root, _ = scipy.linalg.lapack.dtrtri(lower, lower=1, overwrite_c=1)
        except scipy.linalg.LinAlgError:
            values, vectors = np.linalg.eigh(A)
            root = (vectors / np.sqrt(np.maximum(values, _SHIFT))).T
        # A^-1 is root^T root: positive definite whatever rounding does to root.
        self._root = np.ascontiguousarray(root * scale, dtype=np.float32)

    def solve(self, b: NDArray[np.float32], x: NDArray[np.float32]) -> None:
        """Write the solution of A x = b to x."""
        x[:] = (self._root.T @ (self._root @ b.ravel())).reshape(x.shape)

    @property
    def nbytes(self) -> int:
        """Memory held, bytes."""
        return int(self._root.nbytes)

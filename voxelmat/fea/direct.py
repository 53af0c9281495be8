"""A sparse direct factorisation: the last resort for small systems that defeat the multigrid."""

from __future__ import annotations

import numpy as np
import scipy.sparse
import scipy.sparse.linalg
from numpy.typing import NDArray

from voxelmat.errors import ConvergenceError
from voxelmat.fea.element import Spacing, basis_matrices, coefficients

__all__ = ["Direct", "assembled_matrix"]

Double = NDArray[np.float64]


def assembled_matrix(
    lam: Double, mu: Double, spacing: Spacing, element: str
) -> scipy.sparse.csr_matrix:
    """K as a sparse matrix; unknown (d, k, j, i) has the number of that entry in C order."""
    shape = tuple(n + 1 for n in lam.shape)
    size = int(np.prod(shape))
    cells = np.argwhere(mu > 0)
    corners = np.array([(a >> 2, a >> 1 & 1, a & 1) for a in range(8)])
    node = np.ravel_multi_index(tuple(np.moveaxis(cells[:, None] + corners, -1, 0)), shape)
    number = (node[:, :, None] + size * np.arange(3)).reshape(len(cells), 24)
    at = tuple(cells.T)
    values = np.stack([c[at] for c in coefficients(lam, mu, element)], axis=1)
    E = np.einsum("nq,qab->nab", values, basis_matrices(spacing, element))
    rows, columns = np.repeat(number, 24, axis=1), np.tile(number, (1, 24))
    return scipy.sparse.csr_matrix(
        (E.ravel(), (rows.ravel(), columns.ravel())), shape=(3 * size, 3 * size)
    )


class Direct:
    """K factorised on its unknowns, as a preconditioner: conjugate gradients then polish.

    Raises
    ------
    ConvergenceError
        Where the matrix is singular.
    """

    method = "direct"

    def __init__(
        self,
        lam: Double,
        mu: Double,
        spacing: Spacing,
        element: str,
        free: NDArray[np.bool_],
        springs: Double | None,
    ) -> None:
        K = assembled_matrix(lam, mu, spacing, element)
        if springs is not None:
            K = K + scipy.sparse.diags(springs.ravel())
        self._free = np.flatnonzero(free)
        A = K[self._free][:, self._free].tocsc()
        # Unit diagonal, so that stiffness contrast does not spoil the factors.
        self._scale = 1.0 / np.sqrt(A.diagonal())
        D = scipy.sparse.diags(self._scale)
        try:
            self._factors = scipy.sparse.linalg.splu(
                (D @ A @ D).tocsc(),
                permc_spec="MMD_AT_PLUS_A",
                diag_pivot_thresh=0.0,
                options={"SymmetricMode": True},
            )
        except RuntimeError as error:
            raise ConvergenceError(
                f"The stiffness matrix cannot be factorised ({error}). Check that every piece is "
                f"held."
            ) from error
        self._out = np.zeros(free.shape, dtype=np.float32)

    def apply(self, r: Double, scale: float) -> NDArray[np.float32]:
        """Solve K z = scale r."""
        right = r.ravel()[self._free] * (scale * self._scale)
        self._out.ravel()[self._free] = self._factors.solve(right) * self._scale
        return self._out

    @property
    def nbytes(self) -> int:
        """Memory held by the factors, bytes."""
        return int(12 * self._factors.nnz + self._out.nbytes)

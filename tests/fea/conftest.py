"""Small parts and an assembled matrix for the tests of the solver."""

import numpy as np
import pytest
import scipy.sparse

from voxelmat.fea.element import basis_matrices, coefficients
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.material import Constant, Material


def _assembled(lam, mu, spacing, element):
    """K as a sparse matrix; unknown (d, k, j, i) has the number of that entry in C order."""
    shape = tuple(n + 1 for n in lam.shape)
    nodes = np.arange(np.prod(shape)).reshape(shape)
    nz, ny, nx = lam.shape
    corner = np.stack(
        [nodes[a >> 2 : nz + (a >> 2), a >> 1 & 1 : ny + (a >> 1 & 1), a & 1 : nx + (a & 1)].ravel()
         for a in range(8)], axis=1)  # fmt: skip
    number = (corner[:, :, None] + nodes.size * np.arange(3)).reshape(len(corner), 24)
    basis = basis_matrices(spacing, element)
    values = np.stack([c.ravel() for c in coefficients(lam, mu, element)], axis=1)
    E = np.einsum("nq,qab->nab", values, basis)
    rows, cols = np.repeat(number, 24, axis=1), np.tile(number, (1, 24))
    size = 3 * nodes.size
    return scipy.sparse.csr_matrix((E.ravel(), (rows.ravel(), cols.ravel())), shape=(size, size))


@pytest.fixture(scope="session")
def assembled():
    return _assembled


@pytest.fixture(scope="session")
def resin():
    def make(name="rigid-example", E=2000.0, nu=0.3, strength=50.0, kind="rigid"):
        """An invented resin."""
        return Material(
            name=name,
            kind=kind,
            E=Constant(value=E, unit="MPa"),
            nu=Constant(value=nu),
            density=Constant(value=1.1e-9),
            strength=Constant(value=strength, unit="MPa"),
        )

    return make


@pytest.fixture(scope="session")
def grid():
    def make(*shape, spacing=(1.0, 1.0, 1.0), origin=(0.0, 0.0, 0.0)):
        return VoxelGrid(shape=shape, spacing=spacing, origin=origin)

    return make

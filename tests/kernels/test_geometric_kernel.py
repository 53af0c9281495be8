"""The initial-stress product against numerical integration over every voxel."""

import itertools

import numba
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.fea.geometric import GeometricStiffness
from voxelmat.kernels.geometric import apply_geometric

pytestmark = pytest.mark.nojit

SPACING = (0.9, 0.7, 1.3)
POINTS, WEIGHTS = np.polynomial.legendre.leggauss(3)


def gradients(xi):
    """Slopes of the 8 shape functions at a point of [-1, 1]^3, (8, 3)."""
    out = np.empty((8, 3))
    for a in range(8):
        sign = [2 * (a >> d & 1) - 1 for d in range(3)]
        for d in range(3):
            others = [0.5 * (1 + sign[e] * xi[e]) for e in range(3) if e != d]
            out[a, d] = 0.5 * sign[d] * 2 / SPACING[d] * np.prod(others)
    return out


def tensor(s, xi):
    """Stress at a point from its 15 modes."""
    x, y, z = xi
    xx, yy, zz, xy, xz, yz = s[:6]
    xx, yy, zz = xx + s[9] * y + s[12] * z, yy + s[6] * x + s[13] * z, zz + s[7] * x + s[10] * y
    xy, xz, yz = xy + s[14] * z, xz + s[11] * y, yz + s[8] * x
    return np.array([[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]])


def twin_product(u, stress, full):
    """27 Gauss points a voxel."""
    y = np.zeros_like(u)
    volume = np.prod(SPACING) / 8
    for k, j, i in np.argwhere(full):
        at = [(k + (a >> 2), j + (a >> 1 & 1), i + (a & 1)) for a in range(8)]
        corners = np.array([u[(slice(None), *p)] for p in at])
        G = np.zeros((8, 8))
        for n in itertools.product(range(3), repeat=3):
            xi = [POINTS[m] for m in n]
            D = gradients(xi)
            weight = np.prod([WEIGHTS[m] for m in n])
            G += volume * weight * D @ tensor(stress[:, k, j, i], xi) @ D.T
        force = G @ corners
        for a, p in enumerate(at):
            y[(slice(None), *p)] += force[a]
    return y


def fields(shape, seed):
    rng = np.random.default_rng(seed)
    full = rng.random(shape) < 0.8
    u = rng.standard_normal((3, *(n + 1 for n in shape)))
    return u, rng.standard_normal((15, *shape)), full


@settings(deadline=None, max_examples=15)
@given(st.tuples(*[st.integers(1, 3)] * 3), st.integers(0, 1000))
def test_product_equals_numerical_integration(shape, seed):
    u, stress, full = fields(shape, seed)
    y = np.full_like(u, np.nan)
    GeometricStiffness(stress, full, SPACING).apply(u, y)
    expected = twin_product(u, stress, full)
    assert np.abs(y - expected).max() <= 1e-13 * max(np.abs(expected).max(), 1e-30)


def test_one_stress_equals_scikit_fem():
    # scikit-fem: the form stress_ij du_k/dx_i dv_k/dx_j on ElementHex1, one stress a voxel
    skfem = pytest.importorskip("skfem")

    shape = (3, 2, 4)
    u, stress, _ = fields(shape, 4)
    stress[6:] = 0.0
    nz, ny, nx = shape
    mesh = skfem.MeshHex.init_tensor(
        *[np.arange(n + 1) * d for n, d in zip((nx, ny, nz), SPACING, strict=True)]
    )
    basis = skfem.Basis(mesh, skfem.ElementVector(skfem.ElementHex1()), intorder=3)
    centre = mesh.p[:, mesh.t].mean(axis=1)
    i, j, k = ((centre[d] / SPACING[d]).astype(int) for d in range(3))
    s = np.array([[tensor(c, (0, 0, 0)) for c in stress[:, k, j, i].T]])[0]

    @skfem.BilinearForm
    def form(a, b, w):
        return np.einsum("eij,kieq,kjeq->eq", s, a.grad, b.grad)

    K = form.assemble(basis)
    x, y, z = np.round(mesh.p / np.array(SPACING)[:, None]).astype(int)
    flat = np.zeros(K.shape[0])
    for d in range(3):
        flat[basis.nodal_dofs[d]] = u[d, z, y, x]
    expected = K @ flat
    out = np.empty_like(u)
    GeometricStiffness(stress, np.ones(shape, bool), SPACING).apply(u, out)
    for d in range(3):
        np.testing.assert_allclose(
            out[d, z, y, x], expected[basis.nodal_dofs[d]], atol=1e-12 * np.abs(expected).max()
        )


def test_same_bits_for_any_number_of_threads():
    u, stress, full = fields((7, 4, 5), 1)
    before = numba.get_num_threads()
    found = []
    for count in (1, numba.config.NUMBA_NUM_THREADS):
        numba.set_num_threads(count)
        y = np.empty_like(u)
        apply_geometric(u, stress, full, y)
        found.append(y)
    numba.set_num_threads(before)
    assert np.array_equal(*found)
    # Slabs as a single thread would take them, one by one, give these bits too.
    y = np.zeros_like(u)
    for k in (0, 2, 4, 6, 1, 3, 5):
        one = np.zeros_like(full)
        one[k] = full[k]
        part = np.empty_like(u)
        apply_geometric(u, stress, one, part)
        y += part
    np.testing.assert_allclose(y, found[0], rtol=1e-13, atol=1e-13)

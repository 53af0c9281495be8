"""The orthotropic product, blocks and energy against the isotropic kernel and dense elements."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.fea import element, orthotropic_element
from voxelmat.fea.orthotropic_element import (
    FORMS,
    corner_blocks,
    element_matrices,
    isotropic_constants,
    kernel_constants,
    modal_table,
)
from voxelmat.fea.orthotropic_operator import stiffness_matrices
from voxelmat.kernels.blocks import voxel_inverses
from voxelmat.kernels.operator import BLOCK, apply_stiffness
from voxelmat.kernels.orthotropic import (
    apply_orthotropic,
    orthotropic_energy,
    orthotropic_inverses,
)

pytestmark = pytest.mark.nojit

SPACING = (0.9, 0.7, 1.3)
FULL = np.zeros((0, 0, 0), dtype=np.uint8)


def random_constants(rng, count):
    """Row 0 empty, then random positive definite stiffness."""
    out = np.zeros((count, 9))
    for n in range(1, count):
        A = rng.standard_normal((3, 3))
        C = A @ A.T + 0.3 * np.eye(3)
        out[n] = [C[0, 0], C[1, 1], C[2, 2], C[0, 1], C[0, 2], C[1, 2], *rng.uniform(0.1, 2, 3)]
    return out


def fields(shape, seed, labels=4):
    rng = np.random.default_rng(seed)
    label = rng.integers(0, labels, shape).astype(np.uint16)
    fill = rng.integers(0, 256, shape).astype(np.uint8)
    u = rng.standard_normal((3, *(n + 1 for n in shape)))
    return rng, label, fill, u


def twin_product(u, labels, fill, K):
    """Voxel by voxel with dense 24x24 matrices; the energies too."""
    y, energy = np.zeros_like(u), np.zeros(labels.shape)
    for k, j, i in np.ndindex(labels.shape):
        at = [(k + (a >> 2), j + (a >> 1 & 1), i + (a & 1)) for a in range(8)]
        v = np.concatenate([u[(slice(None), *p)] for p in at])
        f = fill[k, j, i] / 255.0 * K[labels[k, j, i]] @ v
        energy[k, j, i] = v @ f
        for a, p in enumerate(at):
            y[(slice(None), *p)] += f[3 * a : 3 * a + 3]
    return y, energy


@settings(deadline=None, max_examples=12)
@given(
    st.tuples(*[st.integers(1, 4)] * 3), st.sampled_from(FORMS), st.integers(1, 5), st.integers(0)
)
def test_product_and_energy_equal_dense_elements(shape, form, chunks, seed):
    rng, labels, fill, u = fields(shape, seed)
    constants = random_constants(rng, 4)
    table, c = modal_table(constants, form), kernel_constants(SPACING, form)
    y, energy = np.full_like(u, np.nan), np.empty(shape)
    apply_orthotropic(u, labels, fill, table, y, c, chunks)
    orthotropic_energy(u, labels, fill, table, c, energy)
    expected, stored = twin_product(u, labels, fill, element_matrices(constants, SPACING, form))
    size = max(np.abs(expected).max(), 1e-30)
    assert np.abs(y - expected).max() <= 1e-13 * size
    assert np.abs(energy - stored).max() <= 1e-12 * max(stored.max(), 1e-30)


@pytest.mark.parametrize("form", FORMS)
def test_isotropic_constants_give_the_isotropic_product(form):
    _, labels, _, u = fields((3, 4, BLOCK + 3), 5)
    lam, mu = np.array([0.0, 3.0, 0.2, 500.0]), np.array([0.0, 1.0, 2.0, 0.7])
    y, expected = np.empty_like(u), np.empty_like(u)
    table = modal_table(isotropic_constants(lam, mu), form)
    apply_orthotropic(u, labels, FULL, table, y, kernel_constants(SPACING, form), 2)
    c = element.kernel_constants(SPACING, form)
    apply_stiffness(u, lam[labels], mu[labels], expected, c, 2)
    assert np.abs(y - expected).max() <= 1e-12 * np.abs(expected).max()


@pytest.mark.parametrize("dtype", [np.float64, np.float32])
def test_same_bits_for_any_number_of_chunks(dtype):
    rng, labels, fill, u = fields((7, 4, 9), 1)
    table = modal_table(random_constants(rng, 4)).astype(dtype)
    c = kernel_constants(SPACING, "icmb", dtype)
    u = u.astype(dtype)
    ys = []
    for chunks in (1, 2, 3, 8, 20):
        y = np.full_like(u, np.nan)
        apply_orthotropic(u, labels, fill, table, y, c, chunks)
        ys.append(y)
    assert all(np.array_equal(ys[0], y) for y in ys[1:])


@pytest.mark.parametrize("form", FORMS)
def test_blocks_are_inverses_of_the_diagonal_blocks(form):
    rng, labels, fill, u = fields((2, 3, 2), 3)
    constants = random_constants(rng, 4)
    K = element_matrices(constants, SPACING, form)
    springs = rng.random(u.shape)
    free = np.ones(u.shape, dtype=np.uint8)
    B = np.empty((6, *u.shape[1:]), dtype=np.float64)
    orthotropic_inverses(labels, fill, springs, corner_blocks(constants, SPACING, form), free, B)
    for place in np.ndindex(u.shape[1:]):
        block = np.empty((3, 3))
        for d in range(3):
            e = np.zeros_like(u)
            e[(d, *place)] = 1.0
            y = twin_product(e, labels, fill, K)[0] + springs * e
            block[:, d] = y[(slice(None), *place)]
        xx, yy, zz, xy, xz, yz = B[(slice(None), *place)]
        inverse = np.array([[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]])
        np.testing.assert_allclose(inverse @ block, np.eye(3), atol=1e-10)


def test_blocks_of_isotropic_voxels_are_those_of_the_isotropic_kernel():
    _, labels, _, u = fields((3, 2, 4), 8)
    lam, mu = np.array([0.0, 3.0, 0.2, 500.0]), np.array([0.0, 1.0, 2.0, 0.7])
    free = (np.random.default_rng(2).random(u.shape) < 0.8).astype(np.uint8)
    none = np.zeros((3, 0, 0, 0))
    mine, other = (np.empty((6, *u.shape[1:])) for _ in range(2))
    constants = isotropic_constants(lam, mu)
    orthotropic_inverses(labels, FULL, none, corner_blocks(constants, SPACING), free, mine)
    c, basis = element.kernel_constants(SPACING, "icmb"), element.corner_blocks(SPACING)
    voxel_inverses(lam[labels], mu[labels], none, c, basis, free, other)
    np.testing.assert_allclose(mine, other, atol=1e-11 * np.abs(other).max())


@pytest.mark.parametrize("form", FORMS)
def test_six_rigid_motions_and_eighteen_deformations(form):
    constants = random_constants(np.random.default_rng(4), 3)
    for K in element_matrices(constants, SPACING, form)[1:]:
        values = np.linalg.eigvalsh(K)
        assert np.all(np.abs(values[:6]) < 1e-12 * values[-1])
        assert values[6] > 1e-6 * values[-1]


def test_condensing_incompatible_modes_gives_icm():
    # Wilson and Taylor's nine modes 1 - x^2, 1 - y^2, 1 - z^2 of each component, condensed from
    # 3x3x3 Gauss quadrature (Taylor, Beresford & Wilson 1976; attribution from memory)
    constants = random_constants(np.random.default_rng(6), 2)
    h = np.asarray(SPACING)
    p, w = np.polynomial.legendre.leggauss(3)
    C = stiffness_matrices(constants)[1]
    corner = np.array([[2 * (a >> d & 1) - 1 for d in range(3)] for a in range(8)])
    big = np.zeros((33, 33))
    for a, b, c in np.ndindex(3, 3, 3):
        x = np.array([p[a], p[b], p[c]])
        grad = np.zeros((11, 3))
        for n in range(8):
            terms = 1 + corner[n] * x
            for d in range(3):
                grad[n, d] = corner[n, d] / 8 * np.prod(np.delete(terms, d))
        for d in range(3):
            grad[8 + d, d] = -2 * x[d]
        grad *= 2 / h
        B = np.zeros((6, 33))
        for n in range(11):
            gx, gy, gz = grad[n]
            B[:, 3 * n : 3 * n + 3] = [
                [gx, 0, 0], [0, gy, 0], [0, 0, gz], [gy, gx, 0], [gz, 0, gx], [0, gz, gy],
            ]  # fmt: skip
        big += w[a] * w[b] * w[c] * h.prod() / 8 * B.T @ C @ B
    inner = np.linalg.solve(big[24:, 24:], big[24:, :24])
    expected = big[:24, :24] - big[:24, 24:] @ inner
    found = element_matrices(constants, SPACING, "icm")[1]
    np.testing.assert_allclose(found, expected, atol=1e-12 * np.abs(expected).max())
    full = element_matrices(constants, SPACING, "full")[1]
    np.testing.assert_allclose(full, big[:24, :24], atol=1e-12 * np.abs(full).max())


def test_forms_without_an_orthotropic_counterpart_are_refused():
    with pytest.raises(InputError, match="no orthotropic form; choose one of icmb, icm, full"):
        orthotropic_element.modal_table(np.zeros((1, 9)), "bbar")

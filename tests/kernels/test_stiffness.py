"""The stiffness product, the gradient forms and the centre strain against slow twins."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.fea.element import ELEMENTS, corner_blocks, element_matrix, kernel_constants
from voxelmat.kernels.blocks import voxel_inverses
from voxelmat.kernels.forms import centre_strain, centre_strain_adjoint, stiffness_slopes
from voxelmat.kernels.operator import BLOCK, apply_stiffness

pytestmark = pytest.mark.nojit

SPACING = (0.9, 0.7, 1.3)


def twin_product(u, lam, mu, spacing, element):
    """Voxel by voxel with the dense 24x24 matrix."""
    y = np.zeros_like(u)
    nz, ny, nx = lam.shape
    for k in range(nz):
        for j in range(ny):
            for i in range(nx):
                K = element_matrix(lam[k, j, i], mu[k, j, i], spacing, element)
                at = [(k + (a >> 2), j + (a >> 1 & 1), i + (a & 1)) for a in range(8)]
                f = K @ np.concatenate([u[(slice(None), *p)] for p in at])
                for a, p in enumerate(at):
                    y[(slice(None), *p)] += f[3 * a : 3 * a + 3]
    return y


def fields(shape, seed):
    rng = np.random.default_rng(seed)
    lam, mu = rng.random(shape) + 0.1, rng.random(shape) + 0.1
    empty = rng.random(shape) < 0.2
    lam[empty], mu[empty] = 0.0, 0.0
    u = rng.standard_normal((3, *(n + 1 for n in shape)))
    return lam, mu, u


@settings(deadline=None, max_examples=20)
@given(
    st.tuples(*[st.integers(1, 4)] * 3), st.sampled_from(ELEMENTS), st.integers(1, 5), st.integers()
)
def test_product_equals_dense_elements(shape, element, chunks, seed):
    lam, mu, u = fields(shape, abs(seed))
    y = np.full_like(u, np.nan)
    apply_stiffness(u, lam, mu, y, kernel_constants(SPACING, element), chunks)
    expected = twin_product(u, lam, mu, SPACING, element)
    assert np.abs(y - expected).max() <= 1e-13 * max(np.abs(expected).max(), 1e-30)


def test_rows_longer_than_a_block():
    lam, mu, u = fields((2, 1, BLOCK + 3), 5)
    y = np.empty_like(u)
    apply_stiffness(u, lam, mu, y, kernel_constants(SPACING, "icmb"), 2)
    expected = twin_product(u, lam, mu, SPACING, "icmb")
    np.testing.assert_allclose(y, expected, atol=1e-13 * np.abs(expected).max())


@pytest.mark.parametrize("dtype", [np.float64, np.float32])
def test_same_bits_for_any_number_of_chunks(dtype):
    lam, mu, u = (a.astype(dtype) for a in fields((7, 4, 9), 1))
    c = kernel_constants(SPACING, "icmb", dtype)
    ys = []
    for chunks in (1, 2, 3, 8, 20):
        y = np.empty_like(u)
        apply_stiffness(u, lam, mu, y, c, chunks)
        ys.append(y)
    assert all(np.array_equal(ys[0], y) for y in ys[1:])


@pytest.mark.parametrize("element", ELEMENTS)
def test_slopes_are_derivatives_of_the_form(element):
    # v . K u by central differences of the dense twin, one voxel at a time
    lam, mu, u = fields((1, 2, 2), 3)
    lam, mu = np.abs(lam) + 0.2, mu + 0.2
    v = fields((1, 2, 2), 4)[2]
    dlam, dmu = np.empty_like(lam), np.empty_like(mu)
    stiffness_slopes(u, v, lam, mu, kernel_constants(SPACING, element), dlam, dmu)
    step = 1e-5
    for at in np.ndindex(lam.shape):
        for field, slope in ((lam, dlam), (mu, dmu)):
            old = field[at]
            field[at] = old + step
            up = (v * twin_product(u, lam, mu, SPACING, element)).sum()
            field[at] = old - step
            down = (v * twin_product(u, lam, mu, SPACING, element)).sum()
            field[at] = old
            assert slope[at] == pytest.approx((up - down) / (2 * step), rel=1e-6, abs=1e-8)


@pytest.mark.parametrize("element", ELEMENTS)
def test_moduli_times_slopes_are_the_form(element):
    # Euler: the element is of first degree in (lam, mu), so lam dlam + mu dmu = u . K u
    lam, mu, u = fields((2, 3, 2), 7)
    dlam, dmu = np.empty_like(lam), np.empty_like(mu)
    stiffness_slopes(u, u, lam, mu, kernel_constants(SPACING, element), dlam, dmu)
    expected = (u * twin_product(u, lam, mu, SPACING, element)).sum()
    assert (lam * dlam + mu * dmu).sum() == pytest.approx(expected, rel=1e-12)


def test_centre_strain_of_a_linear_field():
    shape = (2, 3, 4)
    G = np.array([[1.0, 2.0, 3.0], [0.5, -1.0, 0.25], [4.0, 1.5, -2.0]])  # du_a/dx_b
    axes = [h * np.arange(n + 1) for h, n in zip(SPACING[::-1], shape, strict=True)]
    z, y, x = np.meshgrid(*axes, indexing="ij")
    u = np.einsum("ab,b...->a...", G, np.stack([x, y, z]))
    out = np.empty((6, *shape))
    centre_strain(u, 1 / np.array(SPACING), out)
    expected = [1, -1, -2, 2.5, 7.0, 1.75]
    np.testing.assert_allclose(out, np.broadcast_to(np.reshape(expected, (6, 1, 1, 1)), out.shape))


def test_strain_adjoint_is_the_transpose():
    rng = np.random.default_rng(0)
    u, s = rng.standard_normal((3, 4, 3, 5)), rng.standard_normal((6, 3, 2, 4))
    g = 1 / np.array(SPACING)
    e, f = np.empty_like(s), np.empty_like(u)
    centre_strain(u, g, e)
    centre_strain_adjoint(s, g, f)
    assert (e * s).sum() == pytest.approx((u * f).sum(), rel=1e-12)


@pytest.mark.parametrize("element", ["full", "icmb"])
def test_inverse_blocks(element):
    lam, mu, _ = fields((2, 3, 2), 11)
    shape = (3, 3, 4, 3)
    rng = np.random.default_rng(2)
    free = (rng.random(shape) < 0.7).astype(np.uint8)
    springs = rng.random(shape)
    B = np.empty((6, *shape[1:]), np.float32)
    c, corner = kernel_constants(SPACING, element), corner_blocks(SPACING, element)
    voxel_inverses(lam, mu, springs, c, corner, free, B)
    for at in np.ndindex(shape[1:]):
        block = np.diag(springs[(slice(None), *at)])
        for d in range(3):
            unit = np.zeros(shape)
            unit[(d, *at)] = 1
            block[:, d] += twin_product(unit, lam, mu, SPACING, element)[(slice(None), *at)]
        keep = np.flatnonzero(free[(slice(None), *at)])
        expected = np.zeros((3, 3))
        expected[np.ix_(keep, keep)] = np.linalg.inv(block[np.ix_(keep, keep)])
        b = B[(slice(None), *at)]
        got = np.array([[b[0], b[3], b[4]], [b[3], b[1], b[5]], [b[4], b[5], b[2]]])
        np.testing.assert_allclose(got, expected, rtol=2e-6, atol=1e-7 * np.abs(expected).max())

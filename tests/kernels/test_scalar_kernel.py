"""Scalar products, transfers and Galerkin stencils against slow twins."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.ndimage import map_coordinates

from voxelmat.fea.scalar_element import CAPACITIES, element_matrices, modal_factors
from voxelmat.fea.scalar_multigrid import ScalarGrid, _first_elements, _from_elements
from voxelmat.kernels.scalar import (
    BLOCK,
    apply_scalar,
    prolong_add_scalar,
    residual_scalar,
    restrict_scalar,
    smooth_scalar,
)
from voxelmat.kernels.scalar_coarse import (
    apply_stencil_scalar,
    elements_from_elements,
    stencils_from_elements,
)

pytestmark = pytest.mark.nojit

SPACING = (1.0, 0.4, 2.5)
SIZES = st.tuples(*[st.integers(1, 5)] * 3)
KINDS = st.sampled_from(CAPACITIES)


def corners(shape):
    """Flat nodes of every voxel, (voxels, 8), corner c at (c & 1, c >> 1 & 1, c >> 2)."""
    nodes = np.arange(np.prod([n + 1 for n in shape])).reshape([n + 1 for n in shape])
    nz, ny, nx = shape
    return np.stack(
        [
            nodes[a >> 2 : nz + (a >> 2), a >> 1 & 1 : ny + (a >> 1 & 1), a & 1 : nx + (a & 1)]
            for a in range(8)
        ],
        axis=-1,
    ).reshape(-1, 8)


def dense(elements, shape):
    """Matrix over all nodes from element matrices (voxels, 8, 8)."""
    size = int(np.prod([n + 1 for n in shape]))
    A = np.zeros((size, size))
    for at, E in zip(corners(shape), elements, strict=True):
        A[np.ix_(at, at)] += E
    return A


def random_fields(shape, seed):
    rng = np.random.default_rng(seed)
    full = rng.random(shape) < 0.7
    return rng, rng.uniform(0.1, 10, shape) * full, rng.uniform(0.1, 10, shape) * full


def test_element_by_quadrature():
    # Integrals over a box by 2-point Gauss quadrature, exact for these products.
    h = np.array(SPACING)
    K, C, L = np.zeros((8, 8)), np.zeros((8, 8)), np.zeros(8)
    bits = np.array([[a >> d & 1 for d in range(3)] for a in range(8)])
    for g in np.ndindex(2, 2, 2):
        t = 0.5 + (np.array(g) - 0.5) / np.sqrt(3)
        factor = np.where(bits, t, 1 - t)
        N = factor.prod(axis=1)
        G = np.stack(
            [np.where(bits[:, d], 1, -1) / h[d] * np.delete(factor, d, axis=1).prod(axis=1)
             for d in range(3)]
        )  # fmt: skip
        K += G.T @ G * h.prod() / 8
        C += np.outer(N, N) * h.prod() / 8
        L += N * h.prod() / 8
    np.testing.assert_allclose(element_matrices(SPACING, "consistent")[0], K, atol=1e-14)
    np.testing.assert_allclose(element_matrices(SPACING, "consistent")[1], C, atol=1e-14)
    np.testing.assert_allclose(element_matrices(SPACING, "lumped")[1], np.diag(L), atol=1e-14)


@settings(deadline=None, max_examples=20)
@given(SIZES, KINDS, st.integers(1, 4), st.integers(0, 1000))
def test_product_equals_dense_elements(shape, kind, chunks, seed):
    rng, k, c = random_fields(shape, seed)
    u = rng.standard_normal([n + 1 for n in shape])
    y = np.full_like(u, np.nan)
    apply_scalar(u, k, c, y, *modal_factors(SPACING, kind), chunks)
    K, C = element_matrices(SPACING, kind)
    E = k.reshape(-1, 1, 1) * K + c.reshape(-1, 1, 1) * C
    np.testing.assert_allclose(y.ravel(), dense(E, shape) @ u.ravel(), atol=1e-11)


@pytest.mark.parametrize("dtype", [np.float32, np.float64])
def test_same_bits_for_any_number_of_chunks(dtype):
    rng, k, c = random_fields((7, 2, BLOCK + 3), 4)
    u = rng.standard_normal((8, 3, BLOCK + 4)).astype(dtype)
    factors = [f.astype(dtype) for f in modal_factors(SPACING, "consistent")]
    found = []
    for chunks in (1, 2, 3, 8, 20):
        y = np.empty_like(u)
        apply_scalar(u, k.astype(dtype), c.astype(dtype), y, *factors, chunks)
        found.append(y)
    for y in found[1:]:
        np.testing.assert_array_equal(y, found[0])


def test_rows_longer_than_a_block():
    shape = (1, 2, 2 * BLOCK + 5)
    rng, k, c = random_fields(shape, 7)
    u = rng.standard_normal([n + 1 for n in shape])
    y = np.full_like(u, np.nan)
    apply_scalar(u, k, c, y, *modal_factors(SPACING, "lumped"), 2)
    K, C = element_matrices(SPACING, "lumped")
    E = k.reshape(-1, 1, 1) * K + c.reshape(-1, 1, 1) * C
    expected = np.zeros(u.size)
    for at, e in zip(corners(shape), E, strict=True):
        expected[at] += e @ u.ravel()[at]
    np.testing.assert_allclose(y.ravel(), expected, atol=1e-11)


@settings(deadline=None, max_examples=10)
@given(st.tuples(*[st.integers(2, 8)] * 3), st.integers(0, 1000))
def test_transfers(shape, seed):
    rng = np.random.default_rng(seed)
    c = rng.standard_normal([n // 2 + 1 for n in shape]).astype(np.float32)
    f = rng.standard_normal(shape).astype(np.float32)
    P, R = np.zeros_like(f), np.empty_like(c)
    mask = (rng.random(shape) < 0.8).astype(np.float32)
    prolong_add_scalar(c, P, mask)
    whole = map_coordinates(c, np.indices(shape) / 2.0, order=1)
    np.testing.assert_allclose(P, np.where(mask > 0, whole, 0), atol=1e-6)
    restrict_scalar(f, R)
    assert np.vdot(whole.astype(float), f) == pytest.approx(np.vdot(c.astype(float), R), abs=1e-4)


def interpolation_matrix(shape):
    """P over all nodes, from the grid of half as many voxels (rounded up)."""
    coarse = [-(-n // 2) for n in shape]
    columns = []
    for n in range(int(np.prod([m + 1 for m in coarse]))):
        e = np.zeros(int(np.prod([m + 1 for m in coarse])))
        e[n] = 1
        at = np.indices([m + 1 for m in shape]) / 2.0
        columns.append(map_coordinates(e.reshape([m + 1 for m in coarse]), at, order=1).ravel())
    return np.array(columns).T, coarse


def matrix_of(S, shape):
    size = int(np.prod([n + 1 for n in shape]))
    A, y = np.empty((size, size)), np.empty([n + 1 for n in shape], np.float32)
    for n in range(size):
        u = np.zeros(size, np.float32)
        u[n] = 1
        apply_stencil_scalar(S, u.reshape(y.shape), y)
        A[:, n] = y.ravel()
    return A


@settings(deadline=None, max_examples=10)
@given(st.tuples(*[st.integers(2, 5)] * 3), KINDS, st.integers(0, 1000))
def test_coarse_operators_are_the_galerkin_products(shape, kind, seed):
    rng, k, c = random_fields(shape, seed)
    nodes = [n + 1 for n in shape]
    held = rng.random(nodes) < 0.1
    extra = rng.random(nodes) * (rng.random(nodes) < 0.2)
    K, C = element_matrices(SPACING, kind)
    A = dense(k.reshape(-1, 1, 1) * K + c.reshape(-1, 1, 1) * C, shape) + np.diag(extra.ravel())
    A[held.ravel()] = 0
    A[:, held.ravel()] = 0
    grid = ScalarGrid(k, c, SPACING, kind, extra, held, np.ones(nodes, bool))
    E = _first_elements(grid)
    for _ in range(2):
        interpolate, coarse = interpolation_matrix(shape)
        A = interpolate.T @ A @ interpolate
        S = np.empty((coarse[0] + 1, coarse[1] + 1, 27, coarse[2] + 1), np.float32)
        stencils_from_elements(E, S)
        scale = np.abs(A).max()
        np.testing.assert_allclose(matrix_of(S, coarse), A, atol=2e-6 * max(scale, 1e-30))
        shape = coarse
        size = [-(-n // 2) for n in shape]
        fine, E = E, np.empty((size[0], size[1], 64, size[2]), np.float32)
        elements_from_elements(fine, *_from_elements(), E)


def test_smoothing_steps_and_residual():
    rng = np.random.default_rng(3)
    b, y, x, d = (rng.standard_normal((3, 5)).astype(np.float32) for _ in range(4))
    B = rng.random((3, 5)).astype(np.float32)
    B[1, 2] = 0
    a, c = np.float32(0.3), np.float32(0.7)
    step = a * d + c * B * (b - y)
    x1, d1 = x.copy(), d.copy()
    smooth_scalar(b, y, B, x1, d1, a, c, False)
    np.testing.assert_allclose(d1, step, rtol=1e-5, atol=1e-6)
    np.testing.assert_allclose(x1, x + step, rtol=1e-5, atol=1e-6)
    smooth_scalar(b, y, B, x1, d1, a, c, True)
    np.testing.assert_allclose(x1, c * B * b, rtol=1e-5)
    np.testing.assert_array_equal(d1, x1)
    residual_scalar(b, y, B, y)
    assert y[1, 2] == 0

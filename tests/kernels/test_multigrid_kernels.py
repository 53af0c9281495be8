"""Transfers, stencils and vector work against slow twins."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.ndimage import map_coordinates

from voxelmat.kernels.stencil import apply_stencil, scatter_slab
from voxelmat.kernels.transfer import prolong_add, restrict
from voxelmat.kernels.vector import (
    add_product,
    cg_advance,
    cg_direction,
    plane_dots,
    residual,
    scaled_copy,
    smooth_first,
    smooth_next,
)

pytestmark = pytest.mark.nojit

SIZES = st.tuples(*[st.integers(2, 8)] * 3)


def coarse_shape(shape):
    """Nodes of the grid with twice the spacing; odd voxel counts are rounded up."""
    return tuple(n // 2 + 1 for n in shape)


@settings(deadline=None, max_examples=15)
@given(SIZES, st.integers(0, 1000))
def test_prolongation_is_trilinear(shape, seed):
    rng = np.random.default_rng(seed)
    c = rng.standard_normal((3, *coarse_shape(shape))).astype(np.float32)
    f = np.zeros((3, *shape), np.float32)
    B = np.ones((6, *shape), np.float32)
    prolong_add(c, f, B)
    at = np.indices(shape) / 2.0
    for d in range(3):
        np.testing.assert_allclose(f[d], map_coordinates(c[d], at, order=1), atol=1e-6)


@settings(deadline=None, max_examples=15)
@given(SIZES, st.integers(0, 1000))
def test_restriction_is_the_transpose(shape, seed):
    rng = np.random.default_rng(seed)
    c = rng.standard_normal((3, *coarse_shape(shape))).astype(np.float32)
    f = rng.standard_normal((3, *shape)).astype(np.float32)
    Pc, Rf = np.zeros_like(f), np.empty_like(c)
    prolong_add(c, Pc, np.ones((6, *shape), np.float32))
    restrict(f, Rf)
    assert np.vdot(Pc.astype(float), f) == pytest.approx(np.vdot(c.astype(float), Rf), abs=1e-4)


def test_prolongation_leaves_unknowns_that_do_not_exist_at_zero():
    shape = (3, 3, 3)
    B = np.ones((6, *shape), np.float32)
    B[1, 1, 2, 0] = 0
    f = np.ones((3, *shape), np.float32)
    prolong_add(np.ones((3, 2, 2, 2), np.float32), f, B)
    assert f[1, 1, 2, 0] == 0
    assert (f == 2).sum() == f.size - 1


@settings(deadline=None, max_examples=10)
@given(st.tuples(*[st.integers(1, 3)] * 3), st.integers(0, 1000))
def test_stencils_equal_their_element_matrices(shape, seed):
    rng = np.random.default_rng(seed)
    nz, ny, nx = shape
    E = rng.standard_normal((nz, 24, 24, ny, nx)).astype(np.float32)
    S = np.zeros((nz + 1, ny + 1, 243, nx + 1), np.float32)
    u = rng.standard_normal((3, nz + 1, ny + 1, nx + 1)).astype(np.float32)
    expected = np.zeros(u.shape)
    for k, j, i in np.ndindex(shape):
        at = [(k + (a >> 2), j + (a >> 1 & 1), i + (a & 1)) for a in range(8)]
        f = E[k, :, :, j, i].astype(float) @ np.concatenate([u[(slice(None), *p)] for p in at])
        for a, p in enumerate(at):
            expected[(slice(None), *p)] += f[3 * a : 3 * a + 3]
    for k in range(nz):
        scatter_slab(S, E[k], k)
    y = np.empty_like(u)
    apply_stencil(S, u, y)
    np.testing.assert_allclose(y, expected, atol=1e-4)


def test_vector_work():
    rng = np.random.default_rng(3)
    a, b, c, d = rng.standard_normal((4, 5, 17))
    free = (rng.random((5, 17)) < 0.6).astype(np.uint8)
    sums = np.empty(5)
    plane_dots(a, b, sums)
    np.testing.assert_allclose(sums, (a * b).sum(axis=1))

    p, z = a.copy(), b.astype(np.float32)
    cg_direction(p, z, free, 2.0, 0.5)
    np.testing.assert_allclose(p, (2.0 * z + 0.5 * a) * free, rtol=1e-12)

    x, r = a.copy(), b.copy()
    cg_advance(x, r, c, d, free, 0.3, sums)
    np.testing.assert_allclose(x, a + 0.3 * c)
    np.testing.assert_allclose(r, (b - 0.3 * d) * free)
    np.testing.assert_allclose(sums, (r * r).sum(axis=1))

    out = np.empty((5, 17), np.float32)
    scaled_copy(a, 2.0, out)
    np.testing.assert_allclose(out, 2.0 * a, rtol=1e-6)
    y = b.copy()
    add_product(a, c, y)
    np.testing.assert_allclose(y, b + a * c)


def test_chebyshev_steps_and_residual():
    rng = np.random.default_rng(4)
    b, y, d0, x0 = rng.standard_normal((4, 3, 2, 9)).astype(np.float32)
    B = rng.random((6, 2, 9)).astype(np.float32)
    full = np.array([[B[0], B[3], B[4]], [B[3], B[1], B[5]], [B[4], B[5], B[2]]])
    x, d = np.empty_like(b), np.empty_like(b)
    smooth_first(b, B, x, d, np.float32(0.7))
    np.testing.assert_allclose(x, 0.7 * np.einsum("abkn,bkn->akn", full, b), rtol=1e-4, atol=1e-6)
    assert np.array_equal(x, d)
    x, d = x0.copy(), d0.copy()
    smooth_next(b, y, B, x, d, np.float32(0.4), np.float32(0.7))
    step = 0.4 * d0 + 0.7 * np.einsum("abkn,bkn->akn", full, b - y)
    np.testing.assert_allclose(d, step, rtol=1e-4, atol=1e-6)
    np.testing.assert_allclose(x, x0 + step, rtol=1e-4, atol=1e-6)
    B[1, 0, 3] = 0
    r = y.copy()
    residual(b, r, B, r)
    expected = b - y
    expected[1, 0, 3] = 0
    np.testing.assert_allclose(r, expected)

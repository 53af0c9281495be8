"""Cone filter against its slow twin, its transpose, and the projection."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.topopt.filter import ConeFilter, cone_weights
from voxelmat.topopt.projection import half_level, project, volume_keeping_threshold


def slow_filter(x, domain, spacing, radius):
    points = np.argwhere(domain)
    place = points * np.array(spacing[::-1])
    out = np.zeros(x.shape)
    for v, here in zip(points, place, strict=True):
        w = np.maximum(0, radius - np.linalg.norm(place - here, axis=1))
        out[tuple(v)] = w @ x[domain] / w.sum()
    return out


@settings(max_examples=12, deadline=None)
@given(st.integers(0, 10**6), st.floats(0.3, 4.0))
def test_filter_equals_its_slow_twin(seed, radius):
    rng = np.random.default_rng(seed)
    shape, spacing = (4, 5, 6), (0.5, 1.0, 1.5)
    domain, x = rng.random(shape) < 0.7, rng.random(shape)
    fast = ConeFilter(domain, spacing, radius)
    np.testing.assert_allclose(fast(x), slow_filter(x, domain, spacing, radius), atol=1e-14)
    y = rng.random(shape)
    assert (fast(x) * y).sum() == pytest.approx((x * fast.transpose(y)).sum(), rel=1e-12)


def test_filter_keeps_ones_and_works_in_mm():
    domain = np.ones((6, 6, 6), bool)
    one = ConeFilter(domain, (0.2, 0.4, 0.8), 0.9)
    np.testing.assert_allclose(one(np.ones((6, 6, 6))), 1, rtol=1e-14)
    spike = np.zeros((6, 6, 6))
    spike[3, 3, 2] = 1
    reach = np.argwhere(one(spike) > 0) - [3, 3, 2]
    assert np.abs(reach).max(0).tolist() == [1, 2, 3]  # of 0.9 mm along z, y, x; box cut at x 0


@pytest.mark.parametrize("radius", [0.0, -1.0, float("nan"), float("inf"), 1000.0])
def test_filter_refuses_a_senseless_radius(radius):
    with pytest.raises(InputError, match="radius"):
        cone_weights((1, 1, 1), radius)


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 10**6), st.sampled_from([1.0, 4.0, 16.0, 64.0]))
def test_volume_keeping_projection(seed, sharpness):
    # I5: the threshold solves sum P(x) = sum x; published property, any x in [0, 1].
    x = np.random.default_rng(seed).random(200)
    threshold = volume_keeping_threshold(x, sharpness)
    assert abs(project(x, sharpness, threshold)[0].sum() - x.sum()) < 1e-10


@pytest.mark.parametrize("threshold", [0.3, 0.5, 0.7])
@pytest.mark.parametrize("sharpness", [0.0, 1.0, 8.0, 32.0])
def test_projection_ends_derivative_and_half_level(sharpness, threshold):
    x = np.linspace(0, 1, 21)
    value, slope = project(x, sharpness, threshold)
    assert value[0] == pytest.approx(0, abs=1e-15)
    assert value[-1] == pytest.approx(1)
    step = 1e-6
    forward = project(x + step, sharpness, threshold)[0]
    backward = project(x - step, sharpness, threshold)[0]
    np.testing.assert_allclose(slope, (forward - backward) / (2 * step), atol=1e-7)
    level = half_level(sharpness, threshold)
    assert project(np.array([level]), sharpness, threshold)[0][0] == pytest.approx(0.5)


def test_projection_refuses_bad_input():
    with pytest.raises(InputError, match=r"\[0, 1\]"):
        volume_keeping_threshold(np.array([0.5, 1.5]), 4.0)
    with pytest.raises(InputError, match="positive"):
        volume_keeping_threshold(np.array([0.5]), 0.0)

"""Outline of voids and the palette of a design, against shapes that are known exactly."""

import numpy as np
import pytest

from voxelmat.topopt.outline import extend, staircase_distance, void_distance, void_fill
from voxelmat.topopt.quantise import quantise

STEP = (0.5, 0.4, 0.6)  # x, y, z


def centres(shape):
    z, y, x = np.indices(shape)
    return (x + 0.5) * STEP[0], (y + 0.5) * STEP[1], (z + 0.5) * STEP[2]


def ball(shape, radius):
    """Signed distance to a spherical void in the middle, positive in the void."""
    x, y, z = centres(shape)
    m = [0.5 * n * h for n, h in zip(shape[::-1], STEP, strict=True)]
    return radius - np.sqrt((x - m[0]) ** 2 + (y - m[1]) ** 2 + (z - m[2]) ** 2)


def test_distance_to_a_slanted_plane_is_exact():
    shape = (10, 12, 14)
    x, y, z = centres(shape)
    n = np.array([2.0, 1.0, 2.0]) / 3
    want = n[0] * x + n[1] * y + n[2] * z - 4.3
    got = void_distance(0.5 - 0.1 * want, 0.5, STEP, 2.0)
    inner = np.abs(want) < 0.6
    np.testing.assert_allclose(got[inner], want[inner], atol=1e-12)


def test_distance_to_a_round_void_is_accurate_below_a_voxel():
    want = ball((16, 24, 18), 2.6)
    density = 1 / (1 + np.exp(2.0 * want))  # as blurred as a filter leaves it
    got = void_distance(density, 0.5, STEP, 3.0)
    near = np.abs(want) < 0.6
    assert np.abs(got - want)[near].max() < 0.015  # mm; the voxel is 0.4 to 0.6
    # Farther off the nearest of the crossing points counts, half a voxel apart: s^2 / (2 d).
    assert np.abs(got - want)[np.abs(want) < 2.0].max() < 0.09
    assert np.all(np.sign(got[np.abs(want) > 0.03]) == np.sign(want[np.abs(want) > 0.03]))


def test_solid_fraction_has_the_volume_of_the_ball():
    want = ball((16, 24, 18), 2.6)
    density = 1 / (1 + np.exp(2.0 * want))
    got = void_distance(density, 0.5, STEP, 3.0)
    empty = (1 - void_fill(got, density, STEP)).sum() * np.prod(STEP)
    stairs = (want > 0).sum() * np.prod(STEP)
    exact = 4 / 3 * np.pi * 2.6**3
    assert empty == pytest.approx(exact, rel=0.01)
    assert abs(empty - exact) < abs(stairs - exact)


def test_all_solid_and_all_void():
    assert np.all(void_distance(np.ones((3, 3, 3)), 0.5, STEP, 2.0) == -2)
    assert np.all(void_distance(np.zeros((3, 3, 3)), 0.5, STEP, 2.0) == 2)


def test_one_layer_grid():
    x, _, _ = centres((1, 4, 12))
    got = void_distance(0.5 - 0.2 * (x - 2.9), 0.5, STEP, 3.0)
    np.testing.assert_allclose(got, x - 2.9, atol=1e-12)


def test_staircase_distance_of_a_box_is_exact():
    solid = np.zeros((8, 8, 8), bool)
    solid[2:6, 2:6, 2:6] = True
    got = staircase_distance(solid, STEP, 9.0)
    x, y, z = (np.abs(c - 4 * h) - 2 * h for c, h in zip(centres((8, 8, 8)), STEP, strict=True))
    stack = np.stack([x, y, z])
    want = np.linalg.norm(np.maximum(stack, 0), axis=0) + np.minimum(stack.max(0), 0)
    np.testing.assert_allclose(got, want, atol=1e-12)


def test_extension_copies_the_nearest_known_value():
    field, known = np.zeros((1, 1, 5)), np.zeros((1, 1, 5), bool)
    field[0, 0, :2] = 3.0, 8.0
    known[0, 0, :2] = True
    assert extend(field, known, STEP)[0, 0].tolist() == [3, 8, 8, 8, 8]


def test_palette_of_few_blends_is_exact_and_pure_stays_pure():
    w = np.array([[1.0, 0.0], [0.25, 0.75], [0.25, 0.75], [0.0, 1.0]])
    q = quantise(w, np.ones(4), np.array([1.0, 5.0, 5.0, 9.0]), 8)
    np.testing.assert_array_equal(q.table[q.index], w)
    assert q.error == 0


def test_palette_levels_lie_where_the_design_is_dense():
    rng = np.random.default_rng(0)
    t = np.concatenate([rng.normal(0.2, 0.02, 900), rng.random(100)]).clip(0, 1)
    w = np.column_stack([1 - t, t])
    q = quantise(w, np.ones(1000), np.exp(3 * t), 16)
    assert len(q.table) <= 16
    np.testing.assert_allclose(q.table.sum(1), 1, rtol=1e-12)
    uniform = np.round(t * 15) / 15
    assert ((q.table[q.index, 1] - t) ** 2).mean() < 0.5 * ((uniform - t) ** 2).mean()
    assert q.error == pytest.approx(np.abs(q.table[q.index] - w).max())
    coarse, fine = (quantise(w, np.ones(1000), np.exp(3 * t), n).error for n in (4, 64))
    assert fine < coarse


def test_palette_drops_traces():
    w = np.array([[1 - 1e-6, 1e-6, 0.0], [0.5, 0.3, 0.2]])
    q = quantise(w, np.ones(2), np.ones(2), 4)
    assert q.table[q.index[0]].tolist() == [1, 0, 0]
    assert q.error == pytest.approx(1e-6)

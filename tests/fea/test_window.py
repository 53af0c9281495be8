"""A part in a corner of a large empty grid: the same answer, at the cost of its own box."""

import numpy as np
import pytest

from voxelmat.fea.system import LinearSystem
from voxelmat.fea.window import Window

BOX = (slice(3, 8), slice(0, 4), slice(6, 15))
NODES = (slice(None), slice(3, 9), slice(0, 5), slice(6, 16))


def embedded(springs=False):
    """A two-phase block of 5 x 4 x 9 voxels in 13 x 11 x 20, clamped at its low x end."""
    rng = np.random.default_rng(0)
    lam, mu = np.zeros((2, 13, 11, 20))
    mu[BOX] = rng.choice([1.0, 50.0], size=(5, 4, 9))
    lam[BOX] = 1.5 * mu[BOX]
    fixed = np.zeros((3, 14, 12, 21), dtype=bool)
    fixed[..., :7] = True  # more than the part has
    spring = np.zeros(fixed.shape)
    if springs:
        spring[:, 3, :5, 10:16] = 2.0
    return lam, mu, fixed, spring, rng.standard_normal((3, *fixed.shape))


@pytest.mark.parametrize("springs", [False, True])
def test_same_bits_as_the_box_alone(springs):
    lam, mu, fixed, spring, (b, given, guess) = embedded(springs)
    large = LinearSystem(lam, mu, (1.0, 0.8, 1.1), fixed, springs=spring)
    small = LinearSystem(
        *(np.ascontiguousarray(a[BOX]) for a in (lam, mu)),
        (1.0, 0.8, 1.1),
        np.ascontiguousarray(fixed[NODES]),
        springs=spring[NODES],
    )
    assert large.nbytes == small.nbytes
    assert np.array_equal(large.free[NODES], small.free)
    assert large.free.sum() == small.free.sum()
    u = large.solve(b, prescribed=given, x0=guess)
    v = small.solve(
        np.ascontiguousarray(b[NODES]),
        prescribed=given[NODES],
        x0=np.ascontiguousarray(guess[NODES]),
    )
    assert u.history == v.history
    assert np.array_equal(u.u[NODES], v.u)
    assert np.count_nonzero(u.u) == np.count_nonzero(v.u)
    forces = large.apply(u.u)
    assert forces.shape == b.shape
    assert np.array_equal(forces[NODES], small.apply(v.u))
    assert np.count_nonzero(forces) == np.count_nonzero(forces[NODES])


def test_springs_on_empty_space_keep_the_whole_grid():
    lam, mu, fixed, spring, (b, *_) = embedded()
    spring[:, 13, 11, 20] = 3.0
    system = LinearSystem(lam, mu, (1.0, 1.0, 1.0), fixed, springs=spring)
    assert system.apply(b)[0, 13, 11, 20] == pytest.approx(3.0 * b[0, 13, 11, 20])


def test_nearly_full_and_empty_grids_are_not_cut():
    solid = np.ones((6, 6, 6), dtype=bool)
    assert not Window(~solid).cuts
    solid[0, 0, 0] = False
    assert not Window(solid).cuts
    a = np.arange(216.0).reshape(6, 6, 6)
    assert Window(solid).voxels(a) is a or np.shares_memory(Window(solid).voxels(a), a)
    solid[3:] = False
    window = Window(solid)
    assert window.cuts
    assert window.voxels(a).shape == (3, 6, 6)
    field = np.ones((3, 7, 7, 7))
    assert not window.holds(field)
    assert window.holds(window.whole(window.nodes(field)))

"""Where voxels, nodes and the box of a grid lie."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.model.grid import VoxelGrid

GRIDS = st.builds(
    lambda n, h, o: VoxelGrid(shape=tuple(n), spacing=tuple(h), origin=tuple(o)),
    st.lists(st.integers(1, 6), min_size=3, max_size=3),
    st.lists(st.floats(0.01, 5), min_size=3, max_size=3),
    st.lists(st.floats(-50, 50), min_size=3, max_size=3),
)


@settings(deadline=None, max_examples=25)
@given(grid=GRIDS)
def test_centres_lie_midway_between_nodes(grid):
    for centre, node, n in zip(grid.centres(), grid.nodes(), grid.shape, strict=True):
        assert centre.shape == (n,)
        assert node.shape == (n + 1,)
        np.testing.assert_allclose(centre, (node[1:] + node[:-1]) / 2, atol=1e-12)
    assert grid.upper == pytest.approx([x[-1] for x in grid.nodes()], abs=1e-12)
    assert grid.n_voxels == math.prod(grid.shape)


@settings(deadline=None, max_examples=25)
@given(grid=GRIDS, seed=st.integers(0, 1000))
def test_every_centre_is_found_again(grid, seed):
    cell = tuple(int(c) for c in np.random.default_rng(seed).integers(0, grid.shape))
    point = tuple(float(x[c]) for x, c in zip(grid.centres(), cell, strict=True))
    assert grid.index_of(point) == cell
    outside = tuple(u + h for u, h in zip(grid.upper, grid.spacing, strict=True))
    assert grid.index_of(outside) is None


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ({"shape": (0, 1, 1)}, "at least one voxel"),
        ({"shape": (1, 1)}, "three values"),
        ({"shape": 5}, "three values"),
        ({"shape": (2**20, 2**20, 2)}, "larger than 2\\^40"),
        ({"spacing": (1, 0, 1)}, "must be positive"),
        ({"spacing": (1, math.nan, 1)}, "must be positive"),
        ({"spacing": (1, math.inf, 1)}, "must be positive"),
        ({"origin": (0, 0, math.nan)}, "must be finite"),
    ],
)
def test_refused(change, said):
    with pytest.raises(InputError, match=said):
        VoxelGrid(**{"shape": (2, 3, 4), "spacing": (1, 1, 1), **change})


def test_fractions_of_a_voxel_are_refused():
    with pytest.raises(InputError, match="at least one voxel"):
        VoxelGrid(shape=(1.5, 2, 2), spacing=(1, 1, 1))

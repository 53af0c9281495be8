"""The streaming union-find against an independent labelling library on random volumes."""

import cc3d
import numpy as np
from hypothesis import example, given, settings
from hypothesis import strategies as st
from scipy import ndimage

from voxelmat.printing.ballscreen import packed
from voxelmat.printing.pieces import Pieces

SHAPES = st.tuples(st.integers(1, 9), st.integers(1, 9), st.integers(1, 140))


def streamed(block):
    stream = Pieces(*block.shape[1:])
    for plane in block:
        stream.add(packed(plane))
    return stream.found()


def agree(block):
    found = streamed(block)
    labels, n = cc3d.connected_components(block.astype(np.uint8), connectivity=6, return_N=True)
    assert len(found) == n
    sizes = np.bincount(labels.ravel(), minlength=n + 1)
    assert [p.sites for p in found] == sorted(sizes[1:], reverse=True)
    seen = set()
    for piece in found:
        column, row, layer = piece.place
        label = int(labels[layer, row, column])
        assert label > 0
        assert sizes[label] == piece.sites
        assert piece.on_tray == bool((labels[0] == label).any())
        sides = (labels[:, 0], labels[:, -1], labels[:, :, 0], labels[:, :, -1])
        assert piece.at_side == any(bool((s == label).any()) for s in sides)
        seen.add(label)
    assert len(seen) == n


@settings(deadline=None, max_examples=25)
@given(st.integers(0, 2**32 - 1), SHAPES, st.floats(0, 1))
@example(1, (9, 9, 128), 0.31)  # near the percolation threshold of the cubic lattice
@example(2, (9, 9, 64), 0.69)
def test_random_sites(seed, shape, fill):
    agree(np.random.default_rng(seed).random(shape) < fill)


@settings(deadline=None, max_examples=15)
@given(st.integers(0, 2**32 - 1), st.floats(0.3, 0.7), st.booleans())
def test_random_sponges(seed, level, inverted):
    smooth = ndimage.zoom(np.random.default_rng(seed).random((4, 4, 24)), (4, 4, 6), order=1)
    agree((smooth < level) ^ inverted)


def test_spirals_that_join_late():
    block = np.zeros((7, 15, 90), bool)
    block[::2, ::2] = True
    for k in range(1, 7, 2):
        block[k, 0 if k % 4 == 1 else -1, 0 if k % 4 == 1 else -1] = True
    for j in range(1, 15, 2):
        block[::2, j, 0 if j % 4 == 1 else -1] = True
    agree(block)

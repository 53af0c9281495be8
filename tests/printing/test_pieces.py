"""Streaming pieces against scipy's labelling of the whole block."""

import numpy as np
import pytest
from scipy import ndimage

from voxelmat.kernels.bitplane import to_words
from voxelmat.printing.pieces import Pieces


def words(plane):
    packed = np.packbits(plane, axis=1)
    out = np.empty((plane.shape[0], -(-packed.shape[1] // 8)), np.uint64)
    to_words(packed, out)
    return out


@pytest.mark.parametrize("fill", [0.05, 0.2, 0.31, 0.5])
@pytest.mark.parametrize("shape", [(1, 1, 1), (5, 9, 70), (9, 6, 128)])
def test_pieces_equal_scipy(fill, shape):
    block = np.random.default_rng(7).random(shape) < fill
    stream = Pieces(*shape[1:])
    for plane in block:
        stream.add(words(plane))
    found = stream.found()
    labels, n = ndimage.label(block)
    assert len(found) == n
    assert sorted(p.sites for p in found) == sorted(np.bincount(labels.ravel())[1:])
    for piece in found:
        column, row, layer = piece.place
        member = labels == labels[layer, row, column]
        assert member.sum() == piece.sites
        assert piece.on_tray == member[0].any()
        side = member[:, [0, -1], :].any() or member[:, :, [0, -1]].any()
        assert piece.at_side == side


def test_many_runs_grow_the_store():
    plane = np.zeros((100, 256), bool)
    plane[::2, ::2] = True
    stream = Pieces(100, 256)
    stream.add(words(plane))
    stream.add(words(np.ones_like(plane)))
    assert [p.sites for p in stream.found()] == [50 * 128 + 100 * 256]

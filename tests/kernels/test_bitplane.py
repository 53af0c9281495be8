"""Packed-bit kernels against whole-array NumPy and SciPy."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import ndimage

from voxelmat.kernels import bitplane

FULL = np.uint64(0xFFFFFFFFFFFFFFFF)


def pack(plane):
    packed = np.packbits(plane, axis=1)
    words = np.empty((plane.shape[0], -(-packed.shape[1] // 8)), np.uint64)
    bitplane.to_words(packed, words)
    return words


def unpack(words, width):
    return np.unpackbits(words.astype(">u8").view(np.uint8), axis=1, count=width).astype(bool)


def noise(shape, seed, fill=0.4):
    return np.random.default_rng(seed).random(shape) < fill


@pytest.mark.parametrize("width", [1, 7, 8, 63, 64, 65, 200])
def test_words_keep_every_bit(width):
    plane = noise((3, width), width)
    words = pack(plane)
    assert np.array_equal(unpack(words, width), plane)
    assert not unpack(words, words.shape[1] * 64)[:, width:].any()


@pytest.mark.parametrize("fill", [0.0, 0.1, 0.9, 1.0])
def test_counts_and_claims(fill):
    planes = noise((4, 5, 130), 3, fill)
    words = np.stack([pack(p) for p in planes])
    count = np.array([7, 0, 0, 0], np.int64)
    bitplane.count_planes(words, count)
    assert count.tolist() == [
        n + s for n, s in zip(planes.sum(axis=(1, 2)), (7, 0, 0, 0), strict=True)
    ]
    once, twice = np.empty_like(words[0]), np.empty_like(words[0])
    bitplane.claims(words, once, twice)
    assert np.array_equal(unpack(once, 130), planes.any(axis=0))
    assert np.array_equal(unpack(twice, 130), planes.sum(axis=0) > 1)


def test_lone_sites_and_the_first():
    block = noise((3, 9, 140), 11, 0.15)
    words = [pack(p) for p in block]
    out = np.empty_like(words[1])
    n = bitplane.lone_sites(*words, out)
    cross = ndimage.generate_binary_structure(3, 1)
    cross[1, 1, 1] = False
    padded = np.pad(block, 1)
    lone = block[1] & ~ndimage.binary_dilation(padded, cross)[2, 1:-1, 1:-1]
    assert np.array_equal(unpack(out, 140), lone)
    assert n == lone.sum() > 0
    assert bitplane.first_site(out) == tuple(np.argwhere(lone)[0])
    assert bitplane.first_site(np.zeros_like(out)) == (-1, -1)


@settings(deadline=None, max_examples=25)
@given(
    st.integers(1, 6), st.integers(1, 200), st.integers(0, 90), st.integers(0, 90), st.booleans()
)
def test_dilation_equals_a_plain_loop(rows, width, before, after, open_edge):
    # The padding bits of the last word must equal the edge, so whole words are used here.
    width = -(-width // 64) * 64
    plane = noise((rows, width), rows + width + before, 0.02)
    edge = FULL if open_edge else np.uint64(0)
    out = np.empty_like(pack(plane))
    reach = max(before, after)
    wide = np.pad(plane, ((0, 0), (reach, reach)), constant_values=open_edge)
    want = np.zeros_like(plane)
    for s in range(-before, after + 1):
        want |= wide[:, reach + s : reach + s + width]
    bitplane.dilate_rows(pack(plane), before, after, edge, out)
    assert np.array_equal(unpack(out, width), want)
    tall = np.pad(plane, ((reach, reach), (0, 0)), constant_values=open_edge)
    want = np.zeros_like(plane)
    for s in range(-before, after + 1):
        want |= tall[reach + s : reach + s + rows]
    bitplane.dilate_columns(pack(plane), before, after, edge, out)
    assert np.array_equal(unpack(out, width), want)


def test_sites_are_shared_among_voxels_by_overlap():
    random = np.random.default_rng(2)
    plane = noise((6, 210), 4)
    row_at = np.sort(random.integers(0, 3, 6))
    row_share = random.random((6, 2))
    # Voxels of 70 sites each, whose last site reaches into the next; then one whole one.
    whole = np.array([[0, 69], [70, 139], [140, 210]])
    straddle = np.array([69, 139, -1])
    share = np.array([[0.7, 0.3], [0.2, 0.8], [0.0, 0.0]])
    total = np.ones((4, 4))
    bitplane.add_to_voxels(pack(plane), row_at, row_share, whole, 0.5, straddle, share, total)
    weight = np.zeros((4, 210))
    for c, (first, last) in enumerate(whole):
        weight[c, first:last] = 0.5
        if straddle[c] >= 0:
            weight[c : c + 2, straddle[c]] = share[c]
    want = np.ones((4, 4))
    for y in range(6):
        for i in range(2):
            want[row_at[y] + i] += row_share[y, i] * (weight @ plane[y])
    assert np.allclose(total, want, rtol=1e-12)

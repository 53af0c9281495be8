"""Sites of a layer: packing in groups, dealing, and the counter-based noise, against twins."""

import numpy as np
import pytest
from halftone_twins import site_word, unit

from voxelmat.kernels.sites import deal_sites, hash_row, lay_over, pack_sites

pytestmark = pytest.mark.nojit
# Without the JIT NumPy warns of the wrap-around that the hash is made of.
WRAPS = pytest.mark.filterwarnings("ignore:overflow encountered")


@pytest.mark.parametrize("top", [3, 127, 128, 255])
def test_packing_in_groups_of_eight_equals_packbits(top):
    random = np.random.default_rng(top)
    sites = random.integers(0, top + 1, (7, 48)).astype(np.uint8)
    sites[3] = 0
    for first in range(0, top, 8):
        n = min(8, top - first)
        bits = np.full((n, 7, 6), 99, np.uint8)
        pack_sites(sites, first, bits)
        wanted = np.stack([sites == first + c + 1 for c in range(n)])
        assert np.array_equal(bits, np.packbits(wanted, axis=2))


def test_dealing_is_by_place_alone():
    random = np.random.default_rng(4)
    sites = random.integers(0, 4, (9, 32)).astype(np.uint8)
    count = np.ones(256, np.uint8)
    table = np.zeros((256, 3), np.uint8)
    table[1, 0] = 7
    count[2], table[2] = 3, (2, 4, 5)
    count[3], table[3, :2] = 2, (3, 6)
    start = np.array([5, 7, 11])
    whole = sites.copy()
    deal_sites(whole, start, count, table)
    assert (whole[sites == 1] == 7).all()
    assert not whole[sites == 0].any()
    # The slow twin: a site at a time, in blocks of 2 x 2 x 2 sites of the tray.
    for y, x in np.argwhere(sites > 1):
        channels = {2: (2, 4, 5), 3: (3, 6)}[int(sites[y, x])]
        turn = 5 // 2 + (7 + y) // 2 + (11 + x) // 2
        assert whole[y, x] == channels[turn % len(channels)]
    window = sites[3:, 8:].copy()
    deal_sites(window, np.add(start, (0, 3, 8)), count, table)
    assert np.array_equal(window, whole[3:, 8:])


def test_laying_over_fills_what_is_empty_and_tells_of_a_clash():
    random = np.random.default_rng(8)
    one = random.integers(0, 3, (6, 16)).astype(np.uint8)
    other = np.where(one > 0, 0, random.integers(0, 3, one.shape)).astype(np.uint8)
    out = one.copy()
    assert not lay_over(other, out)
    assert np.array_equal(out, one + other)
    other[tuple(np.argwhere(one > 0)[0])] = 1
    assert lay_over(other, one.copy())


@pytest.mark.parametrize("number", [2, 3, 5])
def test_channels_of_a_resin_get_equal_shares(number):
    sites = np.where(np.random.default_rng(1).random((64, 64)) < 0.4, 1, 0).astype(np.uint8)
    count = np.ones(256, np.uint8)
    table = np.zeros((256, number), np.uint8)
    count[1], table[1] = number, np.arange(1, number + 1)
    total = np.zeros(number)
    for layer in range(8):
        dealt = sites.copy()
        deal_sites(dealt, np.array([layer, 0, 0]), count, table)
        total += np.bincount(dealt.ravel(), minlength=number + 1)[1:]
    assert total / total.sum() == pytest.approx(1 / number, abs=0.02)


@WRAPS
def test_noise_equals_whole_number_arithmetic():
    key = 0xFEDCBA9876543210
    out = np.empty(40, np.float32)
    hash_row(12345, 98765, 1_900_000, np.uint64(key), out)
    wanted = [unit(site_word(12345, 98765, 1_900_000 + x, key)) for x in range(40)]
    assert np.array_equal(out, np.array(wanted))


@WRAPS
def test_noise_is_white():
    key = np.uint64(99)
    plane = np.empty((16, 64, 64), np.float32)
    for z in range(16):
        for y in range(64):
            hash_row(z, y, 0, key, plane[z, y])
    assert plane.min() > 0
    assert plane.max() < 1
    n = plane.size
    for g in (1 / 16, 1 / 3, 0.5):
        # K3: the count of independent droplets is binomial; standard deviation sqrt(g (1 - g) / n).
        assert abs((plane < g).mean() - g) < 4 * np.sqrt(g * (1 - g) / n)
    for axis in range(3):
        a, b = plane - 0.5, np.roll(plane, 1, axis) - 0.5
        assert abs((a * b).mean() * 12) < 4 / np.sqrt(n)

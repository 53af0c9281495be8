"""The blue-noise mask: how evenly it spreads droplets, against white noise in the same run."""

import os

import numpy as np
import pytest

from voxelmat.errors import InputError
from voxelmat.printing.mask import SIDE, SKEW, build_mask, mask_phase, thresholds

# Fraction sets of the gates below: single fractions, then blends of three.
SINGLE = [1 / 64, 1 / 16, 1 / 8, 1 / 4, 1 / 3, 1 / 2, 2 / 3]
TRIPLE = [(1 / 3, 1 / 3, 1 / 3), (0.1, 0.3, 0.6)]
SIZE = 136


@pytest.fixture(scope="module")
def skewed():
    z, y, x = np.ogrid[:SIZE, :SIZE, :SIZE]
    layer = (z + SKEW[0] * (x // SIDE) + SKEW[1] * (y // SIDE)) % SIDE
    return thresholds()[layer, y % SIDE, x % SIDE]


@pytest.fixture(scope="module")
def white():
    return np.random.default_rng(5).random((SIZE, SIZE, SIZE), dtype=np.float32)


def windows(field, size, start=3):
    """Means over cubes that do not lie on tile borders."""
    n = (SIZE - start) // size
    cut = field[(slice(start, start + n * size),) * 3]
    return cut.reshape(n, size, n, size, n, size).mean(axis=(1, 3, 5))


def check(blue, noise, mean, times=2.5):
    # Gates measured beforehand on the same fractions: rms over 8^3 sites at most .0075, worst
    # .045, rms over 16^3 at most .002, `times` better than white noise.
    small = windows(blue.astype(np.float64) - mean, 8)
    large = windows(blue.astype(np.float64) - mean, 16)
    rms = np.sqrt((small**2).mean())
    assert rms <= 0.0075
    assert abs(small).max() <= 0.045
    assert np.sqrt((large**2).mean()) <= 0.002
    white_rms = np.sqrt((windows(noise.astype(np.float64) - mean, 8) ** 2).mean())
    assert rms * times <= white_rms


@pytest.mark.parametrize("fraction", SINGLE)
def test_single_fractions(skewed, white, fraction):
    # At 1/64 a window of 8^3 sites holds eight droplets, too few for the full gain.
    times = 1.6 if fraction < 1 / 32 else 2.5
    check(skewed < fraction, white < fraction, np.full(1, fraction), times)


@pytest.mark.parametrize("fractions", TRIPLE)
def test_blends_of_three(skewed, white, fractions):
    low = 0.0
    for fraction in fractions:
        inside = [
            (t >= np.float32(low)) & (t < np.float32(low + fraction)) for t in (skewed, white)
        ]
        check(*inside, np.full(1, fraction))
        low += fraction


def test_a_linear_ramp(skewed, white):
    ramp = ((np.arange(SIZE) + 0.5) / SIZE).astype(np.float32)
    check(skewed < ramp, white < ramp, ramp.astype(np.float64))


@pytest.mark.parametrize("fraction", SINGLE)
def test_volume_over_64_layers(skewed, fraction):
    got = (skewed[5:69, 3:131, 3:131] < np.float32(fraction)).mean()
    assert got == pytest.approx(fraction, abs=1e-4)


def test_no_needles(skewed):
    run = longest = np.zeros((SIZE, SIZE), int)
    for plane in skewed < np.float32(1 / 3):
        run = np.where(plane, run + 1, 0)
        longest = np.maximum(longest, run)
    assert longest.max() <= 12  # a mask repeated every layer runs through all of them


def test_every_threshold_occurs_equally_often():
    levels = np.rint(thresholds() * 65536 - 0.5).astype(int)
    assert np.array_equal(np.bincount(levels.ravel()), np.full(65536, SIDE**3 // 65536))


@pytest.mark.skipif(os.environ.get("NUMBA_DISABLE_JIT") == "1", reason="a minute without JIT")
def test_a_small_mask_built_now_is_blue_and_repeatable():
    mask = build_mask(16, seed=3)
    assert np.array_equal(mask, build_mask(16, seed=3))
    assert not np.array_equal(mask, build_mask(16, seed=4))
    assert np.array_equal(np.sort(mask.ravel()), np.arange(4096) * 16)
    pattern = (mask < 65536 // 4).astype(float) - 0.25
    power = abs(np.fft.fftn(pattern)) ** 2 / pattern.size
    wave = np.linalg.norm(np.meshgrid(*[np.fft.fftfreq(16)] * 3, indexing="ij"), axis=0)
    low = power[(wave > 0) & (wave < 0.15)].mean() / (0.25 * 0.75)
    # Blue means little power at low frequencies (Ulichney 1988, Proc. IEEE 76:56-79); white
    # noise has 1 on this scale, and .075 is our own gate from measurements.
    assert low <= 0.075


def test_side_is_checked():
    with pytest.raises(InputError, match="multiple of 4"):
        build_mask(18)


def test_seed_moves_the_start():
    assert len({mask_phase(seed) for seed in range(20)}) == 20

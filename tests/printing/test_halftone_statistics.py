"""How even every halftone is in windows, and that volumes stay right, on the ten sets of blends."""

from functools import cache

import numpy as np
import pytest
from dithered_block import BLENDS, block, statistics

from voxelmat.model.halftone import METHODS


@cache
def measured(name, method):
    return statistics(*block(name, method))


@pytest.mark.parametrize("method", ["blue noise", "error diffusion"])
@pytest.mark.parametrize("name", BLENDS)
def test_windows_are_even(name, method):
    # Gates measured beforehand on the same sets of blends: rms over 8^3 sites at most .0075, worst
    # .045, rms over 16^3 at most .002, and volume within 1e-4 over 64 layers.
    got, white = measured(name, method), measured(name, "hash noise")
    assert got["rms8"] <= 0.0075
    assert got["max8"] <= 0.045
    assert got["rms16"] <= 0.002
    assert got["volume"] <= 1e-4
    # At 1/64 a window of 8^3 sites holds eight droplets: too few for the full gain.
    assert white["rms8"] >= (1.6 if name == "1/64" else 2.5) * got["rms8"]


@pytest.mark.parametrize("name", ["1/16", "1/3", "1/2"])
def test_hash_noise_is_that_of_independent_droplets(name):
    fraction = BLENDS[name][0]
    # K3: standard deviation of the share in a window of n sites is sqrt(g (1 - g) / n); some
    # 4900 and 500 windows give it to 4 sigma.
    for size, windows in ((8, 17**3), (16, 8**3)):
        wanted = np.sqrt(fraction * (1 - fraction) / size**3)
        got = measured(name, "hash noise")[f"rms{size}"]
        assert abs(got / wanted - 1) < 4 / np.sqrt(2 * windows)


@pytest.mark.parametrize("name", ["1/4", "1/3", "1/3, 1/3, 1/3", "ramp"])
def test_error_diffusion_is_the_low_noise_choice(name):
    assert measured(name, "error diffusion")["rms8"] < measured(name, "blue noise")["rms8"]


@pytest.mark.parametrize("name", ["1/64", "1/8", ".1, .3, .6"])
def test_error_diffusion_starts_and_stays_right_at_walls(name):
    sites, fractions = block(name, "error diffusion")
    found = sites == 1
    fraction = fractions[0][0]
    inner = slice(8, -8)
    # Without a head start the lowest eight layers hold no droplet of 1/64 at all, and without
    # passing up what a wall does not take, the outermost sites have next to none.
    slabs = (
        found[:8, inner, inner], found[inner, :8, inner], found[inner, -8:, inner],
        found[inner, inner, :8], found[inner, inner, -8:],
    )  # fmt: skip
    for slab in slabs:
        assert slab.mean() == pytest.approx(fraction, rel=0.06)


@pytest.mark.parametrize("method", METHODS)
def test_no_needles(method):
    sites, _ = block("1/3", method)
    run = longest = np.zeros(sites.shape[1:], int)
    for plane in sites == 1:
        run = np.where(plane, run + 1, 0)
        longest = np.maximum(longest, run)
    assert longest.max() <= 14  # a pattern repeated every layer runs through all of them

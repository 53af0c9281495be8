"""The streamed screen for thin walls and gaps, against scipy and on planted walls."""

import numpy as np
import pytest
from print_twins import pack_words
from scipy import ndimage

from voxelmat.printing.thin import ThinScreen


def streamed(block, sites, *, solid):
    screen = ThinScreen(*block.shape[1:], sites, solid=solid)
    found = [t for t in map(screen.push, map(pack_words, block)) if t is not None]
    found += screen.finish()
    bits = np.stack(found).astype(">u8").view(np.uint8)
    return np.unpackbits(bits, axis=2, count=block.shape[2]).astype(bool)


def whole(block, sites, *, solid):
    """The same by scipy on a padded block."""
    reach = [3 * n + 3 for n in sites]
    field = np.pad(block if solid else ~block, [(r, r) for r in reach], constant_values=not solid)
    lower = [-((n - 1) // 2) for n in sites]
    core = np.ones_like(field)
    for shift in np.ndindex(*sites):
        by = [-(lo + s) for lo, s in zip(lower, shift, strict=True)]
        core &= np.roll(field, by, axis=(0, 1, 2))
    half = [-(-3 * n // 2) for n in sites]
    near = ndimage.maximum_filter(
        core, size=[2 * h + 1 for h in half], mode="constant", cval=not solid
    )
    thin = field & ~near
    inner = tuple(slice(r, -r) for r in reach)
    return thin[inner]


@pytest.mark.parametrize("solid", [True, False])
@pytest.mark.parametrize("sites", [(1, 1, 1), (2, 3, 4), (3, 1, 2)])
def test_screen_equals_scipy(solid, sites):
    noise = np.random.default_rng(3).random((14, 20, 75))
    block = ndimage.gaussian_filter(noise, 2.0) > 0.5
    assert np.array_equal(streamed(block, sites, solid=solid), whole(block, sites, solid=solid))


def test_a_thin_wall_is_found_and_a_thick_one_is_not():
    block = np.zeros((30, 40, 120), bool)
    block[:, 5:35, 10:14] = True  # 4 sites along columns
    block[:, 5:35, 60:66] = True  # 6 sites: just enough
    thin = streamed(block, (6, 6, 6), solid=True)
    assert thin[:, :, 10:14].sum() == block[:, :, 10:14].sum()
    assert not thin[:, :, 60:66].any()


def test_a_thin_gap_is_found_and_the_outside_is_not():
    block = np.zeros((40, 60, 130), bool)
    block[:, 10:50, 20:110] = True
    block[:, 20:40, 60:63] = False
    thin = streamed(block, (6, 6, 6), solid=False)
    assert thin[10:30, 20:40, 60:63].all()
    assert not thin[:, :10].any()
    assert not thin[:, :, :20].any()


def test_a_ball_is_not_thin():
    z, y, x = np.ogrid[:40, :40, :40]
    ball = (z - 20) ** 2 + (y - 20) ** 2 + (x - 20) ** 2 < 15**2
    assert not streamed(ball, (6, 6, 6), solid=True).any()

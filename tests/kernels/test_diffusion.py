"""Error diffusion within one layer: the textbook weights, and what is passed on is all there is."""

import numpy as np
import pytest

from voxelmat.kernels.diffusion import _most, _owed, _pass_on, _shares, _sweep
from voxelmat.kernels.sites import hash_row
from voxelmat.printing.halftone import _WEIGHTS
from voxelmat.printing.mask import SIDE, thresholds

pytestmark = pytest.mark.nojit
# Without the JIT NumPy warns of the wrap-around that the hash is made of.
WRAPS = pytest.mark.filterwarnings("ignore:overflow encountered")
# K1: Floyd & Steinberg 1976, Proc. SID 17:75-77.
FLOYD_STEINBERG = np.array([7, 3, 5, 1]) / 16


OPEN = np.ones(9, np.uint8)


def spread(step, before=OPEN, here=OPEN, following=OPEN):
    """Where one unit of error of the middle site of seven goes: line, next line, layer above."""
    fields = tuple(np.zeros((9, 2), np.float32) for _ in range(5))
    value = np.array([1.0, 0.0], np.float32)
    share = np.empty(9, np.float32)
    _shares(3, step, _WEIGHTS.astype(np.float32), before, here, following, share)
    _pass_on(value, 1, 3, step, share, *fields)
    return [a[1:-1] for a in fields]


@pytest.mark.parametrize("step", [1, -1])
def test_weights_within_the_layer_are_those_of_floyd_and_steinberg(step):
    line, following, *_ = spread(step)
    got = [line[3 + step, 0], following[3 - step, 0], following[3, 0], following[3 + step, 0]]
    assert np.array(got) / sum(got) == pytest.approx(FLOYD_STEINBERG, rel=1e-6)
    assert np.count_nonzero(line[:, 0]) == 1
    assert np.count_nonzero(following[:, 0]) == 3


def test_all_of_the_error_is_passed_on_and_none_of_it_made():
    fields = spread(1)
    assert sum(f[:, 0].sum() for f in fields) == pytest.approx(1.0, abs=1e-6)
    assert sum(f[:, 1].sum() for f in fields) == pytest.approx(-1.0, abs=1e-6)
    assert all(np.allclose(f.sum(axis=1), 0, atol=1e-7) for f in fields)
    share_above = sum(f[:, 0].sum() for f in fields[2:])
    assert share_above == pytest.approx(0.4, abs=1e-6)


@pytest.mark.parametrize("step", [1, -1])
def test_at_walls_the_share_of_a_closed_site_goes_straight_up(step):
    wall = OPEN.copy()
    wall[4 + step] = 0  # the site ahead, and those above and behind it in the next row
    line, following, before, above, after = spread(step, wall, wall, wall)
    assert line[3 + step, 0] == following[3 + step, 0] == above[3 + step, 0] == 0
    total = sum(f[:, 0].sum() for f in (line, following, before, above, after))
    assert total == pytest.approx(1.0, abs=1e-6)
    assert above[3, 0] == pytest.approx(0.16 + 0.06 + 0.6 * 8 / 16, abs=1e-6)
    shut = np.zeros(9, np.uint8)
    assert spread(step, shut, shut, shut)[3][3].tolist() == [1.0, -1.0]


def one_layer(grey, noise=0.0, key=5):
    """Two resins, grey and its rest, diffused in one layer by the four weights alone."""
    rows, columns = grey.shape
    weights = np.array([*FLOYD_STEINBERG, 0, 0], np.float32)
    numbers = np.array([1, 0, 0], np.uint8)
    inside = np.ones(columns, np.uint8)
    line = np.zeros((2, columns + 2, 2), np.float32)
    above = np.zeros((3, columns + 2, 2), np.float32)
    carry = np.zeros((columns, 2), np.float32)
    can_take = np.zeros(columns + 2, np.uint8)
    can_take[1:-1] = 1
    out = np.zeros((rows, columns), np.uint8)
    for y in range(rows):
        fraction = np.stack([grey[y], 1 - grey[y]], axis=1).astype(np.float32)
        _sweep(
            inside, can_take, can_take, can_take, fraction, numbers, 0, y, 0, np.uint64(key),
            weights, np.float32(noise), np.float32(0), carry,
            np.ones(columns, np.uint8), line[y % 2], line[1 - y % 2], *above, out[y],
        )  # fmt: skip
        line[y % 2] = 0
    return out


@WRAPS
def test_two_resins_in_a_plane_are_the_textbook_method():
    # Floyd & Steinberg 1976, rows alternately from the left and the right.
    grey = np.random.default_rng(3).uniform(0.05, 0.95, (20, 23)).astype(np.float32)
    wanted = np.zeros(grey.shape, np.uint8)
    work = grey.astype(np.float64)
    for y in range(20):
        step = 1 if y % 2 == 0 else -1
        for x in range(23)[::step]:
            wanted[y, x] = work[y, x] >= 0.5
            error = work[y, x] - wanted[y, x]
            places = [(y, x + step), (y + 1, x - step), (y + 1, x), (y + 1, x + step)]
            for (b, a), weight in zip(places, FLOYD_STEINBERG, strict=True):
                if b < 20 and 0 <= a < 23:
                    work[b, a] += error * weight
    assert np.array_equal(one_layer(grey), wanted)


def test_what_a_blend_does_not_have_is_never_laid_and_shared_out():
    fraction = np.array([[0.5, 0.0, 0.5]], np.float32)
    line = np.array([[0, 0, 0], [0.1, 0.3, -0.4], [0, 0, 0]], np.float32)
    carry = np.array([[0.0, 0.5, 0.0]], np.float32)
    value = np.empty(3, np.float32)
    _owed(fraction, line, carry, 0, np.float32(0), value)
    assert value == pytest.approx([0.5 + 0.1 + 0.4, 0.0, 0.5 - 0.4 + 0.4])


@WRAPS
def test_noise_decides_between_equals_and_only_by_its_width():
    fraction = np.full((1, 3), 1 / 3, np.float32)
    equal = np.full(3, 1 / 3, np.float32)
    ahead = np.array([0.2, 0.71, 0.2], np.float32)
    words = [np.uint64(w) for w in range(300)]
    chosen = [_most(fraction, 0, equal, w, np.float32(0.5)) for w in words]
    # K3, Bernoulli: 4 standard deviations.
    assert abs(np.bincount(chosen) / 300 - 1 / 3).max() < 4 * np.sqrt(2 / 9 / 300)
    assert {_most(fraction, 0, ahead, w, np.float32(0.5)) for w in words} == {1}


def low_power(pattern, fraction):
    """K2: mean power below half the principal frequency over that of white noise."""
    # Ulichney 1988, Proc. IEEE 76:56-79: principal frequency fg = sqrt(min(g, 1 - g)).
    power = abs(np.fft.fftn(pattern - pattern.mean())) ** 2 / pattern.size
    wave = np.linalg.norm(
        np.meshgrid(*[np.fft.fftfreq(n) for n in pattern.shape], indexing="ij"), axis=0
    )
    low = (wave > 0) & (wave < np.sqrt(min(fraction, 1 - fraction)) / 2)
    return power[low].mean() / (fraction * (1 - fraction))


# At 1/2 half the principal frequency is .35, most of what a lattice in space holds, and the mask
# has .11 there (measured): the rule is one for planes.
@pytest.mark.parametrize("fraction", [0.06, 0.1, 0.2, 0.25, 1 / 3, 0.4, 0.6, 0.75])
@WRAPS
def test_the_mask_is_blue_and_the_hash_is_white(fraction):
    assert low_power((thresholds() < fraction).astype(float), fraction) <= 0.075
    white = np.empty((SIDE // 4, SIDE, SIDE), np.float32)
    for z, plane in enumerate(white):
        for y, row in enumerate(plane):
            hash_row(z, y, 0, np.uint64(9), row)
    # K2 gives white noise .97 to .99; sampling adds 4 sigma of the mean over the waves counted.
    assert low_power((white < fraction).astype(float), fraction) == pytest.approx(1, abs=0.06)

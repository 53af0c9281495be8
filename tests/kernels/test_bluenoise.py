"""The blocked void-and-cluster kernel against a plain search of the whole box."""

import numpy as np
import pytest

from voxelmat.kernels.bluenoise import void_and_cluster


def plain(energy, filled, kernel):
    """Ulichney 1993 (Proc. SPIE 1913:332-343), every search over the whole box."""
    n, r = energy.shape[0], kernel.shape[0] // 2
    offsets = [(o, kernel[o]) for o in np.ndindex(kernel.shape)]

    def flip(energy, filled, at):
        sign = -1.0 if filled[at] else 1.0
        filled[at] = not filled[at]
        for offset, weight in offsets:
            energy[tuple((a + o - r) % n for a, o in zip(at, offset, strict=True))] += sign * weight

    def tightest(energy, filled):
        return np.unravel_index(np.where(filled, energy, -np.inf).argmax(), energy.shape)

    def emptiest(energy, filled):
        return np.unravel_index(np.where(filled, np.inf, energy).argmin(), energy.shape)

    start = np.argwhere(filled)
    filled = np.zeros_like(filled)
    for at in start:
        flip(energy, filled, tuple(at))
    while True:
        out = tightest(energy, filled)
        flip(energy, filled, out)
        into = emptiest(energy, filled)
        flip(energy, filled, into)
        if into == out:
            break
    rank = np.empty(energy.shape, int)
    e, f = energy.copy(), filled.copy()
    for number in range(len(start) - 1, -1, -1):
        at = tightest(e, f)
        flip(e, f, at)
        rank[at] = number
    for number in range(len(start), filled.size):
        at = emptiest(energy, filled)
        flip(energy, filled, at)
        rank[at] = number
    return rank


@pytest.mark.parametrize("seed", [1, 2])
@pytest.mark.parametrize(("side", "reach"), [(8, 2), (12, 3), (8, 3)])
def test_ranks_equal_the_plain_search(seed, side, reach):
    random = np.random.default_rng(seed)
    energy = 1e-5 * random.random((side,) * 3)
    filled = np.zeros(side**3, bool)
    filled[random.choice(side**3, side**3 // 10, replace=False)] = True
    filled = filled.reshape(energy.shape)
    line = np.exp(-0.5 * (np.arange(-reach, reach + 1) / 1.1) ** 2)
    kernel = line[:, None, None] * line[None, :, None] * line[None, None, :]
    want = plain(energy.copy(), filled.copy(), kernel)
    rank = np.empty(energy.shape, np.int32)
    void_and_cluster(energy, filled, kernel, rank)
    assert np.array_equal(np.sort(rank.ravel()), np.arange(side**3))
    assert np.array_equal(rank, want)

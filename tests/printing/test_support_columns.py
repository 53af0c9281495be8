"""Support stands below every overhang, without a gap and without a skin along walls."""

import numpy as np
import pytest
from print_twins import HARD, sphere_distance

from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part
from voxelmat.printing.estimate import estimate
from voxelmat.printing.profile import load_profile
from voxelmat.printing.stack import write_stack
from voxelmat.printing.support import column_support

PALETTE = (EMPTY, Blend.pure("hard"))
STANDARD = load_profile("invented-standard")


def block(stack):
    return np.stack([stack.layer(k) for k in range(stack.n_layers)])


def made(labels, distance=None, spacing=0.4):
    grid = VoxelGrid(shape=labels.shape, spacing=(spacing,) * 3)
    return Part(grid=grid, resins=(HARD,), palette=PALETTE, labels=labels, distance=distance)


def test_every_site_below_the_part_is_support(tmp_path):
    labels = np.zeros((6, 5, 5), np.uint16)
    labels[:, :, 4] = 1  # a roof
    labels[2:4, 1:4, :] = 1  # on a post
    labels[0, :, 2] = 1  # and a ledge under its edge, itself in the air
    stack = write_stack(made(labels), STANDARD, tmp_path / "s")
    sites = block(stack)
    part = sites == 1
    above = np.maximum.accumulate(part[::-1], axis=0)[::-1]
    assert np.array_equal(sites == 2, above & ~part)
    assert (sites == 2).any()
    assert estimate(stack).support_mm3 == pytest.approx(
        float((sites == 2).sum() * stack.raster.site_volume)
    )


def test_a_ball_rests_on_support_without_a_gap(tmp_path):
    grid = VoxelGrid(shape=(14, 14, 14), spacing=(0.4,) * 3)
    distance = sphere_distance(grid, (2.8, 2.8, 2.8), 2.3)
    labels = (distance < 16).astype(np.uint16)
    stack = write_stack(made(labels, distance), STANDARD, tmp_path / "s")
    sites = block(stack)
    part = sites == 1
    under = part[1:] & ~part[:-1]  # the lowest site of each column of the ball
    held = sites[:-1][under] == 2
    assert held.mean() > 0.93  # the rest is the clearance round the equator
    top = sites[sites.shape[0] // 2 + 12 :]
    assert not (top == 2).any()


def test_an_upright_wall_gets_no_skin(tmp_path):
    # A distance that rounding makes uneven by one step, as a voxelised mesh gives it.
    x = np.arange(12)[:, None, None] * 16 - 88
    wobble = np.random.default_rng(0).integers(-1, 2, (12, 6, 9))
    distance = np.clip(abs(x) - 48 + wobble, -127, 127).astype(np.int8)
    labels = (distance < 8).astype(np.uint16)
    stack = write_stack(made(labels, distance), STANDARD, tmp_path / "s")
    sites = block(stack)
    assert (sites == 2).mean() < 0.002


def test_policies(tmp_path):
    labels = np.zeros((4, 3, 3), np.uint16)
    labels[:, :, 2] = 1
    labels[1, :, :] = 1
    for policy in ("none", "machine"):
        stack = write_stack(made(labels), STANDARD, tmp_path / policy, support=policy)
        assert stack.support_channel is None
        assert stack.support_policy == policy
        assert set(np.unique(block(stack))) == {0, 1}
    assert estimate(stack).support_mm3 is None


def test_part_and_support_share_one_field():
    random = np.random.default_rng(1)
    outline = random.integers(-127, 128, (9, 4, 5)).astype(np.int8)
    both = column_support(outline)
    for layer in range(9):
        lowest = outline[layer:].min(axis=0).astype(int) + 2
        assert np.array_equal(both[layer], np.minimum(outline[layer], np.minimum(lowest, 127)))

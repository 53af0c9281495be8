"""Outlines moved against the printer's bias, and the shape that comes out after it."""

import numpy as np
import pytest
from print_twins import HARD, SOFT, layered_part, sphere_distance

from voxelmat.errors import InputError
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part
from voxelmat.printing.average import stack_to_part
from voxelmat.printing.bias import compensated, part_bias
from voxelmat.printing.designed import designed_volumes
from voxelmat.printing.job import placed
from voxelmat.printing.place import rotation_matrix
from voxelmat.printing.profile import load_profile
from voxelmat.printing.stack import write_stack

STANDARD = load_profile("invented-standard")
SIZE = np.array([2.0, 1.5, 1.2])


def block(margin=0, h=0.1, bodies=False):
    """A block of two resins, split along x, with `margin` empty voxels round it."""
    count = np.rint(SIZE / h).astype(int) + 2 * margin
    grid = VoxelGrid(shape=tuple(map(int, count)), spacing=(h,) * 3, origin=(-margin * h,) * 3)
    x, y, z = np.meshgrid(*grid.centres(), indexing="ij")
    q = [np.abs(v - s / 2) - s / 2 for v, s in zip((x, y, z), SIZE, strict=True)]
    outside = np.sqrt(sum(np.maximum(v, 0) ** 2 for v in q))
    distance = outside + np.minimum(np.maximum(np.maximum(*q[:2]), q[2]), 0)
    steps = np.clip(np.rint(distance * 16 / h), -127, 127).astype(np.int8)
    occupancy = np.where(distance < 0, 255, 0).astype(np.uint8)
    labels = np.where(distance < 0, np.where(x < 1, 1, 2), 0).astype(np.uint16)
    return Part(
        grid=grid,
        resins=(HARD, SOFT),
        palette=(EMPTY, Blend.pure("hard"), Blend.pure("soft")),
        labels=labels,
        distance=steps,
        occupancy=occupancy,
        bodies={"block": labels > 0} if bodies else {},
    )


def printed_size(stack):
    """Extent of the droplets along tray x, y, z, mm."""
    solid = np.stack([stack.layer(k) > 0 for k in range(stack.n_layers)], axis=2)
    spans = []
    for axis in range(3):
        line = np.flatnonzero(solid.any(axis=tuple(a for a in range(3) if a != axis)))
        spans.append((line[-1] - line[0] + 1) * stack.pitch_mm[axis])
    return np.array(spans)


@pytest.mark.parametrize("margin", [0, 2])
@pytest.mark.parametrize(
    "bias", [(0.1, 0.1, 0.1), (-0.1, -0.1, -0.1), (0.1, 0.0, 0.05), (0.1, -0.08, 0.0)]
)
def test_a_block_is_moved_by_the_bias_on_every_side(tmp_path, bias, margin):
    stack = write_stack(
        block(margin), STANDARD.replace(bias=bias), tmp_path / "s", support="none"
    )  # fmt: skip
    wanted = SIZE - 2 * np.array(bias)
    assert (np.abs(printed_size(stack) - wanted) <= np.array(stack.pitch_mm) + 1e-9).all()
    assert stack.manifest["method"]["bias_mm"] == list(bias)
    volume = sum(stack.volumes_mm3.values())
    assert volume == pytest.approx(np.prod(wanted), rel=0.06)
    assert sum(stack.designed_mm3.values()) == pytest.approx(np.prod(wanted), rel=0.03)


def test_a_turned_block_takes_the_bias_of_the_trays_axes(tmp_path):
    profile = STANDARD.replace(bias=(0.1, 0.0, 0.0))
    stack = write_stack(
        block(1), profile, tmp_path / "s", support="none", orientation=["z 90"]
    )  # fmt: skip
    wanted = SIZE[[1, 0, 2]] - [0.2, 0, 0]
    assert (np.abs(printed_size(stack) - wanted) <= np.array(stack.pitch_mm) + 1e-9).all()
    assert part_bias(profile, rotation_matrix(["z 90"]).tolist()) == (0.0, 0.1, 0.0)


def test_a_sphere_shrinks_all_round():
    grid = VoxelGrid(shape=(24, 24, 24), spacing=(0.1, 0.1, 0.1), origin=(0, 0, 0))
    distance = sphere_distance(grid, (1.2, 1.2, 1.2), 0.9)
    occupancy = np.clip(127.5 - 16 * distance.astype(float), 0, 255).astype(np.uint8)
    ball = Part(
        grid=grid, resins=(HARD,), palette=(EMPTY, Blend.pure("hard")),
        labels=(occupancy > 0).astype(np.uint16), distance=distance, occupancy=occupancy,
    )  # fmt: skip
    for bias in (0.1, -0.1):
        moved = compensated(ball, STANDARD.replace(bias=(bias, bias, bias)))
        volume = designed_volumes(moved)["hard"]
        assert volume == pytest.approx(4 / 3 * np.pi * (0.9 - bias) ** 3, rel=0.02)
    flat = compensated(ball, STANDARD.replace(bias=(0.0, 0.0, 0.1)))
    # Eroded by an upright segment: at height z the radius is that of the ball at |z| + 0.1. The
    # lines run half a voxel beside the axes.
    x, y, z = (c for c in flat.grid.centres())
    up = flat.distance[len(x) // 2, len(y) // 2, len(z) // 2 :] / 160.0
    top = np.sqrt(0.81 - 2 * 0.05**2) - 0.1
    assert np.interp(0, up, z[len(z) // 2 :]) == pytest.approx(1.2 + top, abs=0.01)
    side = flat.distance[len(x) // 2 :, len(y) // 2, len(z) // 2] / 160.0
    radius = np.sqrt(0.81 - 0.05**2 - 0.15**2)
    assert np.interp(0, side, x[len(x) // 2 :]) == pytest.approx(1.2 + radius, abs=0.01)


@pytest.mark.parametrize("bias", [(0.1, 0.1, 0.1), (-0.1, -0.1, -0.1), (0.1, 0.0, 0.05)])
def test_as_printed_has_the_outline_of_the_design_again(tmp_path, bias):
    part = block(2)
    stack = write_stack(part, STANDARD.replace(bias=bias), tmp_path / "s", support="none")
    printed = stack_to_part(stack, part)
    assert (printed.occupancy == part.occupancy).all()
    before = {k: v for k, v in part.volumes().items() if v}
    assert printed.volumes() == pytest.approx(before, rel=0.03)
    plain = write_stack(part, STANDARD, tmp_path / "p", support="none")
    assert plain.volumes_mm3["hard"] != pytest.approx(stack.volumes_mm3["hard"], rel=0.03)


def test_what_the_stack_has_lost_does_not_come_back(tmp_path):
    """A fin of one voxel vanishes under a bias of .1 mm a side; the solve must see that."""
    part = block(2)
    fin = np.zeros(part.grid.shape, dtype=bool)
    fin[:, 3, 14:16] = True
    # The fin stands alone: 0.1 mm thin, three voxels clear of nothing else.
    labels = np.zeros_like(part.labels)
    labels[2:10, 2:17, 2:6] = 1
    labels[fin] = 1
    inside = labels > 0
    distance = np.where(inside, -8, 8).astype(np.int8)
    distance[3:9, 3:16, 3:5] = -24
    lost = part.replace(
        labels=labels, distance=distance, occupancy=np.where(inside, 255, 0).astype(np.uint8)
    )
    stack = write_stack(
        lost, STANDARD.replace(bias=(0.06, 0.06, 0.06)), tmp_path / "s", support="none"
    )  # fmt: skip
    printed = stack_to_part(stack, lost)
    assert (printed.occupancy[:, 3, 14:16] == 0).all()
    assert (printed.occupancy[4:8, 4:14, 3] == 255).all()


def test_no_bias_changes_nothing():
    part = block()
    assert compensated(part, STANDARD) is part
    assert placed(part, STANDARD).part is part


def test_what_cannot_be_compensated():
    profile = STANDARD.replace(bias=(0.1, 0.1, 0.1))
    with pytest.raises(InputError, match="no signed distance"):
        placed(layered_part("occupancy"), profile)
    with pytest.raises(InputError, match="6 voxels"):
        compensated(block(), STANDARD.replace(bias=(0.7, 0, 0)))


def test_bodies_are_kept_on_the_wider_grid():
    moved = compensated(block(bodies=True), STANDARD.replace(bias=(0.1, 0.1, 0.1)))
    assert moved.bodies["block"].shape == moved.grid.shape
    assert moved.bodies["block"].sum() == (block().labels > 0).sum()
    assert moved.grid.origin == pytest.approx((-0.1, -0.1, -0.1))

"""3-D thickness: planted walls, struts, gaps and holes found and measured; none in a clean part."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from print_twins import HARD, SOFT, sphere_distance
from scipy import ndimage

from voxelmat.kernels.ballspread import spread_ball
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.minimum_sizes import MinimumSizes
from voxelmat.model.part import Part
from voxelmat.printing.ballscreen import _ball, _span, thin_sites
from voxelmat.printing.measure import width_at
from voxelmat.printing.profile import load_profile
from voxelmat.printing.stack import write_stack
from voxelmat.printing.thickness import solid_block, thickness_findings

LEAST = MinimumSizes(wall=0.5, gap=0.5, hole=0.6, strut=0.7, feature=0.3)
STANDARD = load_profile("invented-standard").replace(minimum=LEAST)
STEPS = 16
H = 0.2


def graded(shape=(40, 24, 24)):
    """Labels of a block graded along x in steps, half of it a dither, one voxel of air round it."""
    labels = np.zeros(shape, np.uint16)
    labels[1:-1, 1:-1, 1:-1] = 1 + (np.arange(shape[0]) * STEPS // shape[0])[1:-1, None, None]
    return labels


def made(labels, **options):
    t = np.linspace(0, 1, STEPS)
    palette = (EMPTY, *(Blend.of({"hard": 1 - v, "soft": v}) for v in t))
    grid = VoxelGrid(shape=labels.shape, spacing=(H, H, H), origin=(2.0, -1.0, 0.5))
    return Part(grid=grid, resins=(HARD, SOFT), palette=palette, labels=labels, **options)


def found(tmp_path, labels, profile=STANDARD, **options):
    part = labels if isinstance(labels, Part) else made(labels)
    stack = write_stack(part, profile, tmp_path / "s", support="none", **options)
    return thickness_findings(stack)


def at(*voxel):
    return [o + (v + 0.5) * H for o, v in zip((2.0, -1.0, 0.5), voxel, strict=True)]


def near(place, voxel, free=()):
    """Within two voxels of a place, along the axes that are not `free`."""
    wanted = at(*voxel)
    assert all(abs(place[a] - wanted[a]) <= 2 * H for a in range(3) if a not in free), place


def test_a_clean_graded_part_gives_nothing(tmp_path):
    assert found(tmp_path, graded()) == []


def test_a_clean_ball_with_a_flat_and_a_bore_gives_nothing(tmp_path):
    grid = VoxelGrid(shape=(34, 34, 34), spacing=(H,) * 3)
    ball = sphere_distance(grid, (3.4, 3.4, 3.4), 3.0).astype(int)
    x, y, z = np.ix_(*grid.centres())
    bore = (0.8 - np.hypot(x - 3.4, y - 3.4)) * 80 + 0 * z
    cut = (1.5 - z) * 80 + 0 * x + 0 * y
    distance = np.clip(np.maximum(np.maximum(ball, bore), cut), -127, 127).astype(np.int8)
    labels = np.where(distance < 16, 1 + np.arange(34)[:, None, None] * STEPS // 34, 0)
    part = made(np.asarray(labels, np.uint16), distance=distance)
    assert found(tmp_path, part) == []


def test_a_wall_and_its_thickness(tmp_path):
    labels = graded()
    labels[:, :, 8:] = 0
    labels[20:22, 3:21, 8:23] = 5  # 0.4 mm across x
    (one,) = found(tmp_path, labels)
    assert one.code == "wall under minimum"
    near(one.place_mm, (20.5, 12, 15), free=(1, 2))
    assert one.value == pytest.approx(0.4, abs=0.045)
    assert one.limit == pytest.approx(0.5, rel=0.01)
    labels[20:23, 3:21, 8:23] = 5  # 0.6 mm
    assert found(tmp_path, labels) == []


def test_a_wall_that_stands_askew(tmp_path):
    grid = VoxelGrid(shape=(40, 30, 30), spacing=(H,) * 3)
    x, y, z = np.ix_(*grid.centres())
    for thick, expected in ((0.36, 1), (0.75, 0)):
        wall = np.abs(0.8 * (x - 4) + 0.6 * (z - 3)) - thick / 2 + 0 * y
        sides = np.maximum(np.abs(y - 3) - 2.4, np.abs(z - 3) - 2.4) + 0 * x
        distance = np.clip(np.rint(np.maximum(wall, sides) * 80), -127, 127).astype(np.int8)
        labels = np.where(distance < 16, 3, 0).astype(np.uint16)
        result = found(tmp_path / str(thick), made(labels, distance=distance))
        assert len(result) == expected
        for one in result:
            assert one.code == "wall under minimum"
            assert one.value == pytest.approx(thick, abs=0.1)


def test_a_strut_is_judged_by_its_own_limit(tmp_path):
    labels = graded()
    labels[8:32, :, 8:] = 0
    labels[8:32, 10:13, 14:17] = 7  # 0.6 mm: enough for a wall, too thin for a strut
    (one,) = found(tmp_path, labels)
    assert one.code == "strut under minimum"
    near(one.place_mm, (20, 11, 15), free=(0,))
    assert one.value == pytest.approx(0.6, abs=0.09)
    assert one.limit == pytest.approx(0.7, rel=0.01)


def test_a_gap_and_a_hole(tmp_path):
    labels = graded()
    labels[20:22, :, 10:] = 0  # a slot of 0.4 mm
    (one,) = found(tmp_path, labels)
    assert one.code == "gap under minimum"
    near(one.place_mm, (20.5, 12, 15), free=(1, 2))
    assert one.value == pytest.approx(0.4, abs=0.045)
    labels = graded()
    labels[:, 11:13, 11:13] = 0  # a bore of 0.4 mm
    (one,) = found(tmp_path / "hole", labels)
    assert one.code == "hole under minimum"
    near(one.place_mm, (20, 11.5, 11.5), free=(0,))
    assert one.value == pytest.approx(0.4, abs=0.09)


def test_limits_that_differ_by_axis_and_other_orientations(tmp_path):
    labels = graded()
    labels[:, :, 8:] = 0
    labels[20:22, 3:21, 8:23] = 5  # 0.4 mm across x of the part
    sizes = MinimumSizes.of(wall=(0.3, 0.6, 0.3), gap=0.5, hole=0.5, strut=(0.3, 0.6, 0.3))
    profile = STANDARD.replace(minimum=sizes)
    assert found(tmp_path / "a", labels, profile) == []
    (one,) = found(tmp_path / "b", labels, profile, orientation=["z 90"])  # now across tray y
    assert one.limit == pytest.approx(0.6, rel=0.01)
    near(one.place_mm, (20.5, 12, 15), free=(1, 2))


def test_the_limit_of_a_strut_goes_with_the_way_it_runs(tmp_path):
    labels = graded()
    labels[8:32, :, 8:] = 0
    labels[8:32, 10:13, 14:17] = 7  # 0.6 mm, along x of the part
    sizes = MinimumSizes.of(wall=0.5, gap=0.5, hole=0.5, strut=(0.4, 0.9, 0.4))
    profile = STANDARD.replace(minimum=sizes)
    assert found(tmp_path / "a", labels, profile) == []
    (one,) = found(tmp_path / "b", labels, profile, orientation=["z 90"])  # along tray y
    assert one.code == "strut under minimum"
    assert one.limit == pytest.approx(0.9, rel=0.01)


def test_bands_find_the_same(tmp_path, monkeypatch):
    labels = graded()
    labels[:, :, 8:] = 0
    labels[20:22, 3:21, 8:23] = 5
    whole = found(tmp_path, labels)
    monkeypatch.setattr("voxelmat.printing.thickness._MEMORY", 1)
    banded = found(tmp_path, labels)
    assert {f.code for f in banded} == {f.code for f in whole}
    assert banded[0].value == pytest.approx(whole[0].value, abs=0.045)


def ball_offsets(size):
    """Every site of a ball, one by one."""
    spans = [_span(n) for n in size]
    return [
        (a, b, c)
        for a in spans[0]
        for b in spans[1]
        for c in spans[2]
        if sum(
            ((v - s.mean()) / (n / 2)) ** 2 for v, s, n in zip((a, b, c), spans, size, strict=True)
        )
        <= 1
    ]


@settings(deadline=None, max_examples=20)
@given(st.integers(0, 2**32 - 1), st.tuples(*[st.integers(1, 5)] * 3))
def test_screen_against_a_twin(seed, size):
    random = np.random.default_rng(seed)
    block = ndimage.zoom(random.random((5, 4, 9)), 3, order=1) > 0.35
    out = np.ones_like(block)
    padded = np.pad(block, 5)
    n, r, c = block.shape
    for a, b, d in ball_offsets(size):
        out &= padded[5 + a : 5 + a + n, 5 + b : 5 + b + r, 5 + d : 5 + d + c]
    shape = [2 * -(-3 * s // 2) + 1 for s in size]
    near_ball = ndimage.binary_dilation(out, np.ones(shape))
    assert np.array_equal(thin_sites(block, size), block & ~near_ball)


def test_ball_rows_are_those_of_a_ball():
    for size in [(1, 1, 1), (5, 4, 3), (8, 7, 6), (3, 9, 2)]:
        count = _ball(size)
        assert count.sum() == len(ball_offsets(size))
        assert count.max() == size[2]


def test_kernel_spreads_beyond_its_rows():
    ones = np.uint64(2**64 - 1)
    wide = np.zeros((1, 3, 1), np.uint64)
    ring = np.zeros((2, 3, 1), np.uint64)
    spread_ball(wide, np.array([[0, -1], [-1, 0]]), -1, ones, ring, 1)
    assert ring[1, :, 0].tolist() == [ones, 0, 0]  # row -1 lies outside
    assert ring[0, :, 0].tolist() == [0, 0, 0]


def test_width_through_a_site():
    block = np.zeros((20, 20, 20), bool)
    block[:, 6:10] = True
    width, normal = width_at(block, (10, 7, 10), (0.1, 0.2, 0.3))
    assert width == pytest.approx(0.8, abs=0.02)
    assert abs(normal[1]) == pytest.approx(1)


def test_a_block_of_sites_is_that_of_the_layers(tmp_path):
    stack = write_stack(made(graded((8, 7, 6))), STANDARD, tmp_path / "s", support="none")
    block = solid_block(stack, (-2, -1, -3), (12, 9, 21))
    width = stack.raster.image_shape[2]
    bits = np.stack([np.bitwise_or.reduce(stack.bits(k), axis=0) for k in range(12)])
    whole = np.pad(np.unpackbits(bits, axis=2, count=width), ((2, 0), (1, 9), (3, 21)))
    assert np.array_equal(block, whole[:14, :10, :24])
    assert block.any()

"""Islands in mid-air and flat overhangs; none in a clean graded part."""

import numpy as np
import pytest
from print_twins import HARD, SOFT, sphere_distance
from scipy import ndimage

from voxelmat.kernels.components import find_runs
from voxelmat.kernels.islands import count_hanging, find_islands
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part
from voxelmat.printing.ballscreen import packed
from voxelmat.printing.jumps import jump_findings
from voxelmat.printing.profile import load_profile
from voxelmat.printing.stack import write_stack

STANDARD = load_profile("invented-standard")
H = 0.25
PALETTE = (EMPTY, *(Blend.of({"hard": 8 - v, "soft": v}) for v in range(9)))


def graded_ball(n=24, centre=(3.1, 2.9, 3.0)):
    grid = VoxelGrid(shape=(n, n, n), spacing=(H, H, H), origin=(0.5, 0.0, 0.0))
    distance = sphere_distance(grid, np.add(grid.origin, centre) - (0.5, 0, 0), 2.6)
    labels = np.where(distance < 16, 1 + np.arange(n)[:, None, None] * 9 // n, 0)
    return made(labels.astype(np.uint16), distance=distance)


def made(labels, **options):
    grid = VoxelGrid(shape=labels.shape, spacing=(H, H, H), origin=(0.5, 0.0, 0.0))
    return Part(grid=grid, resins=(HARD, SOFT), palette=PALETTE, labels=labels, **options)


def wedge():
    """A leaning block, so that every layer differs a little from the next."""
    labels = np.zeros((30, 16, 16), np.uint16)
    x = np.arange(30)[:, None]
    z = np.arange(16)
    labels[:, 2:14, :] = ((x > 2 + z / 2) & (x < 20 + z / 2))[:, None, :] * 4
    return made(labels)


@pytest.mark.parametrize("policy", ["columns", "grid", "machine"])
@pytest.mark.parametrize("turns", [(), ("x 90",), ("y 180", "z 90")])
def test_a_clean_graded_part_gives_nothing(tmp_path, policy, turns):
    part = graded_ball()
    stack = write_stack(part, STANDARD, tmp_path / "s", support=policy, orientation=turns)
    assert jump_findings(stack) == []
    block = wedge()
    stack = write_stack(block, STANDARD, tmp_path / "b", support=policy)
    assert jump_findings(stack) == []


def test_an_island_and_its_place(tmp_path):
    labels = np.zeros((24, 16, 16), np.uint16)
    labels[2:22, 2:14, 12:] = 3  # a roof
    labels[2:6, 2:14, :12] = 3  # on one wall
    labels[16:18, 6:9, 6:12] = 3  # and a peg that hangs from it
    for policy, expected in (("none", 1), ("columns", 0), ("machine", 0)):
        stack = write_stack(made(labels), STANDARD, tmp_path / policy, support=policy)
        found = [f for f in jump_findings(stack) if f.code == "island in mid-air"]
        assert len(found) == expected
        for one in found:
            assert one.value == pytest.approx(2 * 3 * H * H, rel=0.1)
            x, y, z = one.place_mm
            assert 0.5 + 16 * H <= x <= 0.5 + 18 * H
            assert 6 * H <= y <= 9 * H
            assert z == pytest.approx(6 * H, abs=0.05)


def test_a_flat_overhang(tmp_path):
    labels = np.zeros((36, 30, 12), np.uint16)
    labels[2:34, 2:28, 8:] = 3  # 8 x 6.5 mm
    labels[2:8, 2:28, :8] = 3
    for policy, expected in (("none", 1), ("columns", 0), ("machine", 0)):
        stack = write_stack(made(labels), STANDARD, tmp_path / policy, support=policy)
        found = jump_findings(stack)
        assert [f.code for f in found] == ["flat overhang"] * expected
        for one in found:
            assert one.value == pytest.approx(26 * 26 * H * H, rel=0.03)
            assert one.place_mm[2] == pytest.approx(8 * H, abs=0.05)
            assert 0.5 + 8 * H <= one.place_mm[0] <= 0.5 + 34 * H


def test_islands_against_scipy():
    random = np.random.default_rng(6)
    for fill in (0.1, 0.4, 0.6):
        here, below = random.random((9, 140)) < fill, random.random((9, 140)) < 0.05
        words = packed(here)
        start = np.zeros(10, np.int64)
        first, last = np.empty(2000, np.int32), np.empty(2000, np.int32)
        n = find_runs(words, start, first, last)
        out = np.empty((500, 3), np.int64)
        work = np.empty(n, np.int64), np.empty(n, np.uint8), np.empty(n, np.int64)
        found = find_islands(start, first, last, packed(below), *work, out)
        labels, pieces = ndimage.label(here)
        free = [m for m in range(1, pieces + 1) if not (below & (labels == m)).any()]
        assert found == len(free)
        assert sorted(out[:found, 0]) == sorted((labels == m).sum() for m in free)
        for size, row, column in out[:found]:
            assert (labels == labels[row, column]).sum() == size


def test_hanging_against_numpy():
    random = np.random.default_rng(7)
    here, below = (random.random((6, 100)) < 0.3 for _ in range(2))
    assert count_hanging(packed(here), packed(below)) == (here.sum(), (here & ~below).sum())

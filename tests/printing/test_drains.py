"""Drains: the narrowest place of the widest way out, along any axis; none in a clean part."""

import numpy as np
import pytest
from print_twins import HARD, SOFT
from scipy import ndimage

from voxelmat.kernels.maximin import clearance_squared, count_cells, sort_levels, widest_ways
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part
from voxelmat.printing import coarse as coarse_module
from voxelmat.printing.ballscreen import packed
from voxelmat.printing.coarse import coarse_parts
from voxelmat.printing.drains import CLEANING_WIDTH, drain_findings
from voxelmat.printing.profile import load_profile
from voxelmat.printing.scan import scan
from voxelmat.printing.stack import write_stack

STANDARD = load_profile("invented-standard")
H = 0.2
PALETTE = (EMPTY, *(Blend.of({"hard": 8 - v, "soft": v}) for v in range(9)))


def solid(shape=(36, 30, 30)):
    return np.broadcast_to(1 + np.arange(shape[0])[:, None, None] // 4, shape).astype(np.uint16)


def written(tmp_path, labels, **options):
    grid = VoxelGrid(shape=labels.shape, spacing=(H, H, H), origin=(1.0, 2.0, 3.0))
    part = Part(grid=grid, resins=(HARD, SOFT), palette=PALETTE, labels=labels)
    return write_stack(part, STANDARD, tmp_path / "s", **{"support": "columns", **options})


def near(place, *voxel):
    """Within two voxels; None along an axis means anywhere."""
    wanted = [
        None if v is None else o + (v + 0.5) * H for o, v in zip((1, 2, 3), voxel, strict=True)
    ]
    assert all(w is None or abs(p - w) <= 2 * H for p, w in zip(place, wanted, strict=True)), place


@pytest.mark.parametrize("axis", [0, 1, 2])
@pytest.mark.parametrize("side", [0, 1])
def test_a_narrow_drain_along_each_axis(tmp_path, axis, side):
    labels = solid().copy()
    labels[8:28, 8:22, 8:22] = 0
    along = [slice(14, 17)] * 3  # 0.6 mm
    along[axis] = slice(0, 15) if side == 0 else slice(15, None)
    labels[tuple(along)] = 0
    stack = written(tmp_path, labels)
    (one,) = drain_findings(stack)
    assert one.code == "narrow drain"
    assert one.value == pytest.approx(0.6, abs=0.09)
    assert one.limit == CLEANING_WIDTH
    wanted = [15, 15, 15]
    wanted[axis] = None
    near(one.place_mm, *wanted)
    assert 0.55 < float(one.message.split()[5]) / (20 * 14 * 14 * H**3) < 1.1


def test_the_narrowest_place_of_the_widest_way(tmp_path):
    labels = solid().copy()
    labels[8:20, 8:22, 8:22] = 0
    labels[19:, 10:13, 10:13] = 0  # 0.6 mm all the way
    labels[19:, 17:21, 17:21] = 0  # 0.8 mm, but 0.4 at voxel 28
    labels[28:30, 17:21, 17:21] = 3
    labels[28:30, 18:20, 18:20] = 0
    (one,) = drain_findings(written(tmp_path, labels))
    assert one.value == pytest.approx(0.6, abs=0.09)
    labels[24:26, 10:13, 10:13] = 3  # the first is closed
    (one,) = drain_findings(written(tmp_path, labels, resume=False))
    assert one.value == pytest.approx(0.4, abs=0.09)
    near(one.place_mm, 28.5, 18.5, 18.5)


def test_a_wide_drain_and_an_open_pocket_pass(tmp_path):
    labels = solid().copy()
    labels[8:28, 8:22, 8:22] = 0
    labels[:10, 12:18, 12:18] = 0  # 1.2 mm
    labels[30:33, :, 20:] = 0  # a slot: narrow, but no room behind it
    assert drain_findings(written(tmp_path, labels)) == []
    assert drain_findings(written(tmp_path / "b", solid())) == []


def test_a_room_behind_a_room(tmp_path):
    labels = solid((60, 24, 24)).clip(max=9).copy()
    labels[6:20, 6:18, 6:18] = 0
    labels[28:44, 6:18, 6:18] = 0
    labels[19:29, 11:13, 11:13] = 0  # 0.4 mm between the rooms
    labels[43:, 10:14, 10:14] = 0  # 0.8 mm to the outside
    inner, outer = drain_findings(written(tmp_path, labels))
    assert inner.value == pytest.approx(0.4, abs=0.09)
    assert outer.value == pytest.approx(0.8, abs=0.09)
    assert 19.5 <= (inner.place_mm[0] - 1) / H <= 28
    assert (outer.place_mm[0] - 1) / H >= 43


def test_a_drain_narrower_than_a_cell_and_none_at_all(tmp_path):
    labels = solid().copy()
    labels[8:28, 8:22, 8:22] = 0
    stack = written(tmp_path, labels)
    (one,) = drain_findings(stack)
    assert (one.code, one.value) == ("sealed cavity", 0)
    voxel = [(p - o) / H for p, o in zip(one.place_mm, (1, 2, 3), strict=True)]
    assert labels[tuple(int(v) for v in voxel)] == 0
    hollows = [p for p in scan(stack, (1, 1, 1), (1, 1, 1)).hollows if not p.at_side]
    assert drain_findings(stack, sealed=[p for p in hollows if not p.on_tray]) == []
    labels[:10, 14:15, 14:15] = 0  # 0.2 mm
    (one,) = drain_findings(written(tmp_path, labels, resume=False))
    assert one.code == "narrow drain"
    assert one.value == pytest.approx(0.2, abs=0.09)
    near(one.place_mm, None, 14, 14)


def test_too_large_for_the_memory_is_said(tmp_path, monkeypatch):
    labels = solid().copy()
    labels[8:28, 8:22, 8:22] = 0
    stack = written(tmp_path, labels)
    monkeypatch.setattr(coarse_module, "MOST_CELLS", 500)
    (one,) = drain_findings(stack)
    assert (one.code, one.severity) == ("drains not judged", "note")


def test_coarse_cells_hold_every_site(tmp_path):
    stack = written(tmp_path, solid((9, 8, 7)), support="none")
    (coarse,) = coarse_parts(stack, 0.25)
    bits = np.stack([np.bitwise_or.reduce(stack.bits(k), axis=0) for k in range(stack.n_layers)])
    whole = np.unpackbits(bits, axis=2, count=stack.raster.image_shape[2])
    pad = [(0, -n % s) for n, s in zip(whole.shape, coarse.sites, strict=True)]
    z, y, x = coarse.sites
    a, b, c = coarse.fill.shape
    sums = np.pad(whole, pad).reshape(a, z, b, y, c, x).sum(axis=(1, 3, 5), dtype=int)
    assert np.array_equal(coarse.fill, sums * 255 // (z * y * x))


def test_clearance_against_scipy():
    random = np.random.default_rng(5)
    block = random.random((12, 14, 16)) < 0.02
    spacing, reach = np.array([0.2, 0.25, 0.15]), np.array([5, 4, 7])
    out = np.empty(block.shape, np.float32)
    clearance_squared(block.astype(np.uint8), spacing, reach, out)
    wanted = ndimage.distance_transform_edt(~block, sampling=spacing) ** 2
    small = wanted < 0.99
    assert np.allclose(out[small], wanted[small], atol=1e-5)
    assert (out <= 1.0 + 1e-6).all()


def flood(level, least):
    """Widest ways by thresholds: at each level, which rooms are cut from the outside."""
    rooms = []
    for v in range(1, 255):
        labels, n = ndimage.label(level >= v)
        outside = labels[0, 0, 0]
        rooms += [(v, np.flatnonzero(labels.ravel() == m)) for m in range(1, n + 1) if m != outside]
    return rooms


def test_ways_against_thresholds():
    random = np.random.default_rng(8)
    for _ in range(5):
        level = np.full((8, 9, 10), 255, np.uint8)
        level[1:-1, 1:-1, 1:-1] = random.integers(0, 9, (6, 7, 8))
        flat = level.ravel()
        order = np.empty(flat.size, np.int32)
        n = sort_levels(flat, order)
        assert np.array_equal(flat[order[:n]], np.sort(flat[flat > 0])[::-1])
        events = np.empty((500, 4), np.int64)
        work = [np.full(flat.size, -1, np.int32) for _ in range(3)]
        found = widest_ways(flat, np.array([90, 10, 1]), order, n, *work, 2, events)
        for peak, meeting, at, size in events[:found]:
            assert meeting < 0 or flat[meeting] == at
            labels, _ = ndimage.label(level >= at + 1)  # above the meeting the room is shut off
            assert labels.ravel()[peak] != labels[0, 0, 0]
            if meeting >= 0:
                labels, _ = ndimage.label(level >= at)  # and at it there is a way
                assert labels.ravel()[peak] == labels[0, 0, 0]
                assert flat[peak] - at >= 2
            assert size >= 1
        peaks = {int(p) for p in events[:found, 0]}
        for v, cells in flood(level, 2):
            if flat[cells].max() >= v + 3:
                assert peaks & {int(c) for c in cells}


def test_counting_of_cells():
    plane = np.random.default_rng(2).random((7, 130)) < 0.4
    total = np.zeros((3, 5), np.int32)
    count_cells(packed(plane), 2, 9, 1, 60, total)
    for i in range(3):
        for j in range(5):
            cell = plane[1 + 2 * i : 3 + 2 * i, 60 + 9 * j : 69 + 9 * j]
            assert total[i, j] == cell.sum()

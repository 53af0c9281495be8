"""Trays: packing, distances on the sites, one part of many the same as that part alone."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from print_twins import HARD, SOFT, layered_part

from voxelmat.errors import InputError
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part
from voxelmat.printing.average import average
from voxelmat.printing.clearance import _clash, clashes
from voxelmat.printing.compose import on_whole_bytes
from voxelmat.printing.job import PlacedPart, placed
from voxelmat.printing.pack import Rectangle, free_rectangles, pack
from voxelmat.printing.profile import load_profile, shipped_profiles
from voxelmat.printing.readback import read_stack
from voxelmat.printing.source import source_of
from voxelmat.printing.stack import write_stack
from voxelmat.printing.tray import TrayEntry, lay_out, write_tray

STANDARD = load_profile("invented-standard")
COARSE = load_profile("invented-coarse")
FINE = load_profile("invented-fine")
FINE = FINE.replace(channels={"m1": "", "m2": "", "m3": "", "support": "support"})


def block(size=(3.0, 2.0, 0.6), resin=HARD, name="block"):
    return Part.uniform(VoxelGrid(shape=(1, 1, 1), spacing=size), resin, name=name)


def corner(name="corner", flip=False):
    """An L of 6 x 6 mm with limbs of 2 mm; turned by half a turn if flipped."""
    labels = np.ones((3, 3, 1), dtype=np.uint16)
    labels[1:, 1:] = 0
    if flip:
        labels = labels[::-1, ::-1]
    grid = VoxelGrid(shape=(3, 3, 1), spacing=(2.0, 2.0, 0.3))
    return Part(
        grid=grid, resins=(HARD,), palette=(EMPTY, Blend.pure("hard")), labels=labels, name=name
    )


# ------------------------------------------------------------------ packing
sizes = st.tuples(st.integers(1, 9), st.integers(1, 9))


@settings(deadline=None, max_examples=25)
@given(
    st.lists(sizes, min_size=1, max_size=8),
    st.tuples(st.integers(6, 30), st.integers(6, 30)),
    st.tuples(st.integers(0, 2), st.integers(0, 2)),
    st.lists(st.tuples(st.integers(0, 25), st.integers(0, 25), sizes), max_size=3),
    st.booleans(),
)
def test_packed_rectangles_keep_their_distance(wanted, room, gap, blocks, turn):
    taken = [Rectangle(x, y, *size) for x, y, size in blocks]
    options = [[s, s[::-1]] if turn else [s] for s in wanted]
    spots = pack(options, room, gap=gap, taken=taken)
    grid = np.zeros((room[0] + 60, room[1] + 60), dtype=int)
    for t in taken:
        grid[t.x + 10 : t.x + t.width + 10, t.y + 10 : t.y + t.height + 10] = 1
    for spot, option in zip(spots, options, strict=True):
        if spot is None:
            continue
        w, h = option[spot.option]
        assert spot.x >= 0
        assert spot.y >= 0
        assert spot.x + w <= room[0]
        assert spot.y + h <= room[1]
        x, y = spot.x + 10, spot.y + 10
        assert not grid[x - gap[0] : x + w + gap[0], y - gap[1] : y + h + gap[1]].any()
        grid[x : x + w, y : y + h] = 1
    if any(s is None for s in spots):  # what is left out really has no free place of its own
        filled = [
            Rectangle(s.x, s.y, *o[s.option]) for s, o in zip(spots, options, strict=True) if s
        ]
        grown = [
            Rectangle(r.x - gap[0], r.y - gap[1], r.width + 2 * gap[0], r.height + 2 * gap[1])
            for r in (*filled, *taken)
        ]
        free = free_rectangles(Rectangle(0, 0, *room), grown)
        for spot, option in zip(spots, options, strict=True):
            w, h = option[0]
            if spot is None and not turn:
                assert not any(w <= f.width and h <= f.height for f in free)


def test_turning_makes_room():
    assert pack([[(2, 8)], [(2, 8)]], (8, 4)) == [None, None]
    spots = pack([[(2, 8), (8, 2)], [(2, 8), (8, 2)]], (8, 4))
    assert [s.option for s in spots] == [1, 1]


# ------------------------------------------------------------------ laying out
def test_copies_are_named_and_kept_apart():
    tray = lay_out(
        [TrayEntry(part=block(), name="grip", copies=3), TrayEntry(part=block(), name="cap")],
        STANDARD,
        spacing_mm=2.0,
        job_number="J7",
    )
    assert [p.name for p in tray.parts] == ["grip 1", "grip 2", "grip 3", "cap"]
    assert {p.kind for p in tray.placed} == {"part", "mark", "coupon"}
    boxes = [tray.box_mm(p) for p in tray.placed]
    for n, (x, y, w, h) in enumerate(boxes):
        assert x >= 5
        assert y >= 5
        assert x + w <= 495
        assert y + h <= 395
        for u, v, a, b in boxes[:n]:
            apart = max(x - u - a, u - x - w, y - v - b, v - y - h)
            assert apart > 2.0 - 1e-9
    assert not clashes(tray.job(), 2.0)


def test_what_does_not_fit_is_named_with_sizes():
    with pytest.raises(InputError, match=r"'plate 2' \(60.03 x 50 mm\).*largest place left is"):
        lay_out(
            [TrayEntry(part=block((60.0, 50.0, 1.0), name="plate"), copies=2)],
            COARSE.replace(tray_size=(100.0, 80.0, 60.0)),
            marks=False,
            coupons=False,
        )
    with pytest.raises(InputError, match=r"'giant': .*has room for"):
        lay_out([TrayEntry(part=block((200.0, 5.0, 1.0), name="giant"))], COARSE)


def test_positions_stay_and_the_rest_goes_round_them():
    fixed = TrayEntry(part=block((40.0, 30.0, 0.5), name="base"), position_mm=(30.0, 20.0))
    free = TrayEntry(part=block((10.0, 10.0, 0.5), name="pin"), copies=2)
    tray = lay_out([fixed, free], COARSE, spacing_mm=3.0, coupons=False, job_number="A1")
    x, y, _, _ = tray.box_mm(tray.placed[0])
    pitch = [float(p) for p in COARSE.pitch]
    assert 30 - pitch[0] < x <= 30
    assert 20 - pitch[1] < y <= 20
    assert not clashes(tray.job(), 3.0)


def test_boxes_may_overlap_where_sites_do_not_and_real_overlap_is_refused_with_its_place():
    first = TrayEntry(part=corner("a"), position_mm=(20.0, 20.0))
    hooked = TrayEntry(part=corner("b", flip=True), position_mm=(23.0, 23.0))
    options = {"marks": False, "coupons": False, "spacing_mm": 0.5}
    tray = lay_out([first, hooked], STANDARD, **options)  # boxes overlap by 3 mm, limbs clear by 1
    assert len(tray.placed) == 2
    with pytest.raises(InputError, match="apart at x") as error:
        lay_out([first, hooked], STANDARD, **{**options, "spacing_mm": 1.5})
    assert error.value.key == "position_mm"
    over = TrayEntry(part=corner("b", flip=True), position_mm=(21.5, 21.5))
    with pytest.raises(InputError, match=r"'a' and 'b' overlap on the tray at x 2[0-9.]+, y 2"):
        lay_out([first, over], STANDARD, **options)


def test_a_part_below_the_overhang_of_another_is_refused():
    labels = np.ones((3, 1, 3), dtype=np.uint16)
    labels[1:, :, :2] = 0  # a bracket: an arm over nothing
    bracket = Part(
        grid=VoxelGrid(shape=(3, 1, 3), spacing=(2.0, 2.0, 0.3)),
        resins=(HARD,),
        palette=(EMPTY, Blend.pure("hard")),
        labels=labels,
        name="bracket",
    )
    below = block((1.0, 1.0, 0.2), name="pad")
    with pytest.raises(InputError, match="'bracket' and 'pad' overlap"):
        lay_out(
            [
                TrayEntry(part=bracket, position_mm=(20.0, 20.0)),
                TrayEntry(part=below, position_mm=(24.0, 20.5)),
            ],
            STANDARD,
            marks=False,
            coupons=False,
            support="none",
        )


@pytest.mark.parametrize(
    ("values", "key"),
    [
        ({"copies": 0}, "copies"),
        ({"copies": 2, "position_mm": (1.0, 1.0)}, "position_mm"),
        ({"mark": "sticker"}, "mark"),
        ({"side": "up"}, "side"),
        ({"face": "front"}, "face"),
        ({"protected": np.zeros((2, 2, 2), bool)}, "protected"),
    ],
)
def test_wrong_entries_name_their_key(values, key):
    with pytest.raises(InputError) as error:
        TrayEntry(part=block(), **values)
    assert error.value.key == key


# ------------------------------------------------------------------ one part among others
@pytest.mark.parametrize("profile", [load_profile(n) for n in shipped_profiles()])
def test_window_on_whole_bytes_moves_no_site(profile):
    item = placed(block((3.1, 2.3, 0.2)), profile, position=(20.3, 30.7))
    grown = on_whole_bytes(item.raster, 3)
    assert grown.image_offset[2] % 8 == 3
    spare = item.raster.image_offset[2] - grown.image_offset[2]
    assert 0 <= spare < 8
    shape, more = item.raster.image_shape, grown.image_shape
    assert more == (*shape[:2], shape[2] + spare)
    assert grown.pixel_to_part(0, 0, spare) == item.raster.pixel_to_part(0, 0, 0)


@pytest.mark.parametrize("profile", [STANDARD, FINE])
def test_a_part_of_a_tray_is_that_part_alone(tmp_path, profile):
    graded = layered_part("distance", shape=(7, 6, 5))
    entries = [
        TrayEntry(part=graded, name="graded", position_mm=(50.3, 40.1)),
        TrayEntry(part=block(resin=SOFT), name="soft", copies=2),
    ]
    tray = lay_out(entries, profile, job_number="J7", marks=False)
    stack = write_tray(tray, tmp_path / "tray", seed=5)
    alone = write_stack(graded, profile, tmp_path / "alone", position=(50.3, 40.1), seed=5)
    item = stack.part("graded")
    spare = alone.raster.image_offset[2] - item.raster.image_offset[2]
    layers, rows, columns = alone.raster.image_shape
    item = stack.part("graded")
    start = item.columns.start + spare
    for name in [c.name for c in alone.channels]:
        here = [c.name for c in stack.channels].index(name)
        there = [c.name for c in alone.channels].index(name)
        for k in range(layers):
            bits = np.unpackbits(stack.bits(k)[here], axis=1)
            own = np.unpackbits(alone.bits(k)[there], axis=1)[:, :columns]
            assert (bits[item.rows, start : start + columns] == own).all()
    assert rows == item.rows.stop - item.rows.start


def test_as_printed_averages_of_one_part_are_those_of_the_part_alone(tmp_path):
    graded = layered_part("distance", shape=(7, 6, 5))
    entries = [
        TrayEntry(part=graded, name="graded", position_mm=(50.3, 40.1)),
        TrayEntry(part=block(resin=SOFT), name="soft", copies=2),
    ]
    tray = lay_out(entries, STANDARD, job_number="J7")
    stack = write_tray(tray, tmp_path / "tray", seed=5)
    alone = write_stack(graded, STANDARD, tmp_path / "alone", position=(50.3, 40.1), seed=5)
    here = average(stack, graded.grid, part="graded")
    there = average(alone, graded.grid)
    assert here.resins == there.resins
    for a, b in zip(here.filled, there.filled, strict=True):
        np.testing.assert_allclose(a, b, atol=1e-6)
        assert b.max() > 0


def test_a_tray_of_one_part_has_the_bytes_of_that_part(tmp_path):
    graded = layered_part("distance", shape=(7, 6, 5))
    tray = lay_out(
        [TrayEntry(part=graded, position_mm=(50.3, 40.1))], STANDARD, marks=False, coupons=False
    )
    a = write_tray(tray, tmp_path / "tray", seed=5)
    b = write_stack(graded, STANDARD, tmp_path / "alone", position=(50.3, 40.1), seed=5)
    assert [c.sha256 for c in a.channels] == [c.sha256 for c in b.channels]


def test_bytes_do_not_depend_on_the_split(tmp_path):
    entries = [TrayEntry(part=layered_part("distance", shape=(7, 6, 5)), copies=2)]
    tray = lay_out(entries, COARSE.replace(channels={"m1": "", "m2": "", "m3": ""}), marks=False)
    a = write_tray(tray, tmp_path / "a", threads=1, slab=1000)
    b = write_tray(tray, tmp_path / "b", threads=2, slab=3)
    assert [c.sha256 for c in a.channels] == [c.sha256 for c in b.channels]
    assert [p.name for p in read_stack(tmp_path / "a").parts if p.kind == "part"] == [
        "part 1",
        "part 2",
    ]


def test_windows_must_start_on_a_byte(tmp_path):
    tray = lay_out([TrayEntry(part=block(), copies=2)], STANDARD, marks=False, coupons=False)
    job = tray.job()
    moved = placed(block(), STANDARD, position=(60.35, 60.0), name="moved")
    assert (moved.raster.image_offset[2] - job.window.image_offset[2]) % 8
    from voxelmat.printing.compose import TraySource, tray_window

    parts = (job.parts[0], PlacedPart(part=moved.part, raster=moved.raster, name="moved"))
    with pytest.raises(InputError, match="multiple of 8"):
        TraySource(parts, (), tray_window([p.raster for p in parts], STANDARD))


# ------------------------------------------------------------------ distances, the slow way
@settings(deadline=None, max_examples=25)
@given(st.integers(0, 2**32 - 1), st.integers(0, 6))
def test_the_free_gap_is_that_of_all_pairs_of_sites(seed, shift):
    """`_clash` against every pair of sites: the gap of two boxes is what lies between them."""
    rng = np.random.default_rng(seed)
    pitch = (0.05, 0.05)
    first = np.zeros((14, 14), bool)
    second = np.zeros((14, 14), bool)
    first[:5, :6] = rng.random((5, 6)) < 0.4
    second[2 + shift : 6 + shift, 4:9] = rng.random((4, 5)) < 0.4
    found = _clash(first, second, pitch)
    a, b = np.argwhere(first), np.argwhere(second)
    if not len(a) or not len(b):
        assert found is None
        return
    steps = np.abs(a[:, None] - b[None])
    assert found is not None
    assert found[2] == bool((steps.sum(axis=2) == 0).any())
    gaps = np.hypot(*(np.maximum(steps - 1, 0) * np.array(pitch)).transpose(2, 0, 1))
    # The nearest pair of centres is looked at; another pair may be nearer by its edges, by less
    # than a site.
    assert gaps.min() - 1e-12 <= found[0] <= gaps.min() + pitch[0]


def test_copies_share_their_planes_and_turned_ones_do_not():
    part = layered_part("distance", shape=(7, 6, 5))
    entries = [TrayEntry(part=part, copies=3), TrayEntry(part=part, orientation=("z 90",))]
    tray = lay_out(entries, FINE, marks=False, coupons=False)
    source = source_of(tray.job())
    first, second, third, turned = (s.planes for s in source._slicers)
    assert first is second
    assert second is third
    assert turned is not first


def test_thousands_of_copies_are_laid_out_and_named():
    tray = lay_out(
        [TrayEntry(part=block((2.0, 1.5, 1.0)), copies=2000)],
        STANDARD,
        spacing_mm=1.0,
        marks=False,
        coupons=False,
    )
    assert len({p.name for p in tray.placed}) == 2000
    corners = np.array([tray.box_mm(p) for p in tray.placed])
    assert len(np.unique(corners[:, :2], axis=0)) == 2000
    assert not clashes(tray.job(), 1.0)
    with pytest.raises(InputError, match="would be called 'a 1'"):
        lay_out(
            [TrayEntry(part=block(), name="a", copies=2), TrayEntry(part=block(), name="a 1")],
            STANDARD,
        )

"""Skins, soft walls that tear, slender soft features: planted ones found, a clean part is clean."""

import numpy as np
import pytest
from print_twins import HARD, MID, SOFT, sphere_distance

from voxelmat.errors import InputError
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part
from voxelmat.printing import checks3d
from voxelmat.printing import zones as zones_module
from voxelmat.printing.checks3d import design_findings, three_d_findings
from voxelmat.printing.place import place
from voxelmat.printing.profile import load_profile
from voxelmat.printing.skins import SKIN_DROPLETS, skin_findings
from voxelmat.printing.slender import DRAG_LIMIT, slender_findings
from voxelmat.printing.stack import write_stack
from voxelmat.printing.support import fill_columns, outline_box, outline_field
from voxelmat.printing.tearing import TEAR_BOTH, tearing_findings
from voxelmat.printing.zones import Zones

STANDARD = load_profile("invented-standard")
STEPS = 12
#: 1 hard, 2 soft, 3 middling, then a gradient from hard to soft.
GRADE = tuple(Blend.of({"hard": 1 - t, "soft": t}) for t in np.linspace(0.02, 0.98, STEPS))
PALETTE = (EMPTY, Blend.pure("hard"), Blend.pure("soft"), Blend.pure("mid"), *GRADE)
ORIGIN = (1.0, -2.0, 0.0)


def made(labels, h=0.2, **options):
    grid = VoxelGrid(shape=labels.shape, spacing=(h, h, h), origin=ORIGIN)
    return Part(grid=grid, resins=(HARD, SOFT, MID), palette=PALETTE, labels=labels, **options)


def zoned(part, turns=()):
    return Zones.of(part, place(outline_box(part, outline_field(part)), STANDARD, turns))


def near(place_mm, voxel, h=0.2, free=()):
    for a in range(3):
        if a not in free:
            assert abs(place_mm[a] - ORIGIN[a] - (voxel[a] + 0.5) * h) <= 2 * h, (place_mm, voxel)


def graded_dome(n=32, h=0.25):
    """A graded ball with a flat underside, on support where it overhangs."""
    grid = VoxelGrid(shape=(n, n, n), spacing=(h, h, h), origin=ORIGIN)
    middle = np.add(ORIGIN, n * h / 2)
    ball = sphere_distance(grid, middle, 0.45 * n * h).astype(int)
    z = grid.centres()[2]
    distance = np.clip(np.maximum(ball, (1.2 - z) * 16 / h), -127, 127).astype(np.int8)
    labels = np.where(distance < 16, 4 + np.arange(n)[:, None, None] * STEPS // n, 0)
    return made(labels.astype(np.uint16), h, distance=distance)


@pytest.mark.parametrize("policy", ["columns", "grid", "machine"])
def test_a_clean_graded_part_gives_no_finding_of_any_3d_check(tmp_path, policy):
    part = graded_dome()
    stack = write_stack(part, STANDARD, tmp_path / "s", support=policy)
    assert three_d_findings(stack, part) == []


def test_zones_lie_where_the_design_has_them():
    labels = np.zeros((6, 5, 4), np.uint16)
    labels[1, 2, 3] = 2
    labels[3:, 1:, :2] = 1
    for turns in ((), ("x 90",), ("z -90", "y 180")):
        zones = zoned(made(labels), turns)
        (at,) = np.argwhere(zones.soft)
        near(zones.place(tuple(at)), (1, 2, 3))
        assert zones.modulus[tuple(at)] == pytest.approx(1.0, rel=1e-5)
        assert zones.rigid.sum() == 3 * 4 * 2


# ---------------------------------------------------------------- skins
def skinned(thick, axis=2, under=2, over=1, shape=(30, 32, 34)):
    labels = np.full(shape, under, np.uint16)
    cut = [slice(None)] * 3
    cut[axis] = slice(shape[axis] - thick, None)
    labels[tuple(cut)] = over
    return labels


@pytest.mark.parametrize("axis", [0, 1, 2])
def test_a_thin_rigid_skin_over_soft(axis):
    h = 0.05
    pitch = (25.4 / 600, 25.4 / 300, 0.03)[axis]
    enough = int(np.ceil(SKIN_DROPLETS * pitch / h - 1e-9))
    labels = skinned(enough - 1, axis)
    (one,) = skin_findings(zoned(made(labels, h)))
    assert (one.code, one.severity) == ("thin rigid skin", "warn")
    assert one.value == pytest.approx((enough - 1) * h)
    assert one.limit == pytest.approx(SKIN_DROPLETS * pitch, rel=1e-3)
    wanted = [10, 10, 10]
    wanted[axis] = labels.shape[axis] - 0.5 * enough
    near(one.place_mm, wanted, h, free=[a for a in range(3) if a != axis])
    assert skin_findings(zoned(made(skinned(enough, axis), h))) == []


def test_a_soft_skin_is_a_note_and_a_gradient_is_none():
    (one,) = skin_findings(zoned(made(skinned(2, under=1, over=2), 0.05)))
    assert (one.code, one.severity) == ("thin soft skin", "note")
    assert skin_findings(zoned(made(skinned(2, under=3), 0.05))) == []  # on a middling resin
    labels = (4 + np.arange(24) * STEPS // 24) * np.ones((10, 10, 1), int)
    assert skin_findings(zoned(made(labels.astype(np.uint16), 0.05))) == []


def test_a_turned_skin_is_judged_along_the_axis_it_lies_across():
    labels = skinned(4, axis=2)  # 0.2 mm: enough for layers (0.18), not for rows (0.51)
    assert skin_findings(zoned(made(labels, 0.05))) == []
    (one,) = skin_findings(zoned(made(labels, 0.05), ("x 90",)))
    assert one.limit == pytest.approx(SKIN_DROPLETS * 25.4 / 300, rel=1e-3)
    near(one.place_mm, (0, 0, 32), 0.05, free=(0, 1))


def test_the_feather_edge_of_a_sound_zone_is_no_skin():
    x, _, z = np.indices((40, 20, 40))
    labels = np.where(z > 40 - x, 1, 2).astype(np.uint16)  # rigid, in a wedge of 45 degrees
    assert skin_findings(zoned(made(labels, 0.05))) == []


# ---------------------------------------------------------------- soft walls that tear
def roofed(thick, label=2, both=True):
    """A wall across x under a wide roof, so that support stands on both its sides, or on one."""
    labels = np.zeros((40, 24, 24), np.uint16)
    labels[2 : 38 if both else 20 + thick, 2:22, 18:] = 1
    labels[20 : 20 + thick, 4:20, 1:18] = label
    labels[2:38, 2:22, 0:1] = 0
    return made(labels)


def test_a_thin_soft_wall_in_support():
    (one,) = tearing_findings(zoned(roofed(3)), fill_columns)
    assert one.code == "support tears soft wall"
    assert one.value == pytest.approx(0.6, abs=0.05)
    assert one.limit == TEAR_BOTH
    near(one.place_mm, (21, 12, 9), free=(1, 2))
    assert "both sides" in one.message
    assert tearing_findings(zoned(roofed(3, label=3)), fill_columns) == []  # 50 MPa
    assert tearing_findings(zoned(roofed(6)), fill_columns) == []  # 1.2 mm
    assert tearing_findings(zoned(roofed(3)), None) == []


def test_support_on_one_side_tears_only_what_is_very_thin():
    (one,) = tearing_findings(zoned(roofed(2, both=False)), fill_columns)
    assert one.value == pytest.approx(0.4, abs=0.05)
    assert "one side" in one.message
    assert tearing_findings(zoned(roofed(4, both=False)), fill_columns) == []


# ---------------------------------------------------------------- slender features
def column(label, wide, high):
    labels = np.zeros((40, 40, high + 6), np.uint16)
    labels[2:38, 2:38, :6] = 1
    labels[20 : 20 + wide, 20 : 20 + wide, 6:] = label
    return made(labels)


def test_a_slender_soft_column():
    (one,) = slender_findings(zoned(column(2, 5, 40)), None)  # 8 mm over 1 mm at 1 MPa
    assert one.code == "slender feature"
    assert one.value == pytest.approx(8.0, rel=0.12)
    assert one.limit == pytest.approx(DRAG_LIMIT ** (1 / 3), rel=1e-3)
    near(one.place_mm, (22, 22, 45))
    assert slender_findings(zoned(column(2, 5, 18)), None) == []  # 3.6 to 1
    assert slender_findings(zoned(column(3, 5, 40)), None) == []  # 50 MPa
    assert slender_findings(zoned(column(1, 5, 40)), None) == []


def test_a_wall_counts_and_lying_down_does_not():
    labels = np.zeros((40, 40, 46), np.uint16)
    labels[2:38, 2:38, :6] = 1
    labels[18:22, 4:36, 6:] = 2  # a soft wall of 0.8 mm, 8 mm high
    (one,) = slender_findings(zoned(made(labels)), None)
    near(one.place_mm, (19.5, 20, 45), free=(1,))
    assert slender_findings(zoned(made(labels), ("y 90",)), None) == []


def test_what_is_held_by_support_or_tied_together_passes():
    labels = np.zeros((40, 40, 60), np.uint16)
    labels[2:38, 2:38, :4] = 1
    labels[6:34, 6:34, 56:] = 1
    labels[18:22, 18:22, 4:56] = 2
    zones = zoned(made(labels))
    assert len(slender_findings(zones, None)) == 1
    assert slender_findings(zones, fill_columns) == []
    labels[6:34, 6:34, 56:] = 0
    for k in range(14, 56, 12):  # ties to four neighbours
        labels[8:32, 18:22, k : k + 2] = 2
    for x in (8, 28):
        labels[x : x + 4, 18:22, 4:56] = 2
    assert slender_findings(zoned(made(labels)), None) == []


# ---------------------------------------------------------------- together
def test_what_is_too_large_is_said(monkeypatch):
    part = made(skinned(2), 0.05)
    raster = place(outline_box(part, outline_field(part)), STANDARD)
    (one,) = design_findings(part, raster, STANDARD, name="grip 1")
    assert one.part == "grip 1"
    monkeypatch.setattr(zones_module, "MOST_VOXELS", 100)
    monkeypatch.setattr(checks3d, "MOST_VOXELS", 100)
    (note,) = design_findings(part, raster, STANDARD, name="grip 1")
    assert (note.code, note.severity, note.part) == ("zones not judged", "note", "grip 1")
    with pytest.raises(InputError, match="too large"):
        Zones.of(part, raster)

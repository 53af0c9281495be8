"""The test kit: what it holds, how its sheet is read back, and what is refused."""

import csv
import dataclasses
from datetime import date

import numpy as np
import pytest
from print_twins import HARD, SOFT
from scipy import ndimage

from voxelmat.errors import InputError
from voxelmat.model.minimum_sizes import MinimumSizes
from voxelmat.printing.kit_result import kit_result
from voxelmat.printing.kit_rows import FACTORS, TESTED, plan_kit
from voxelmat.printing.kit_sheet import KIT_FILE, read_sheet, write_sheet
from voxelmat.printing.profile import load_profile, shipped_profiles
from voxelmat.printing.stack import write_stack
from voxelmat.printing.testkit import build_kit

STANDARD = load_profile("invented-standard")
DAY = date(2026, 12, 1)


def sized(**sizes):
    return STANDARD.replace(minimum=MinimumSizes.of(**sizes))


@pytest.fixture(scope="module")
def coarse():
    """A kit of few voxels."""
    plan = plan_kit(load_profile("invented-coarse"))
    return plan, build_kit(plan, HARD, SOFT)


@pytest.mark.parametrize("name", shipped_profiles())
def test_every_feature_in_every_size(name):
    profile = load_profile(name)
    plan = plan_kit(profile)
    for kind, axes in TESTED:
        for axis in axes or ("",):
            sizes = [r.nominal_mm for r in plan.rows if (r.kind, r.axis) == (kind, axis)]
            least = profile.minimum.xyz(kind)
            start = least["xyz".index(axis)] if axis else max(least)
            wanted = [f * start for f in FACTORS]
            pitch = float(profile.pitch["xyz".index(axis)]) if kind in ("wall", "gap") else 0.0
            assert sizes == pytest.approx(wanted, abs=0.51 * pitch + 1e-6)
            if pitch:
                assert np.allclose(np.rint(np.array(sizes) / pitch), np.array(sizes) / pitch)
    for axis in "xyz":
        assert sum((r.kind, r.axis) == ("dimension", axis) for r in plan.rows) == 3
    assert len({r.name for r in plan.rows}) == len(plan.rows)
    # Squares of features lie apart from each other.
    places = np.array([r.place_mm for r in plan.rows if r.kind in ("wall", "gap", "strut", "hole")])
    gaps = np.abs(places[:, None] - places[None]).max(axis=2) + 1e9 * np.eye(len(places))
    assert gaps.min() > 0.99 * plan.cell_mm


def solid_along(part, start, axis):
    """Length of solid along an axis through a point, by linear interpolation of the distance."""
    h = part.grid.spacing[0]
    origin = np.array(part.grid.origin)
    line = np.tile(np.array(start, float)[:, None], 4001)
    line[axis] += np.linspace(-1, 1, 4001) * 40 * h
    index = (line - origin[:, None]) / h - 0.5
    inside = (
        ndimage.map_coordinates(part.distance.astype(float), index, order=1, mode="nearest") < 0
    )
    middle = 2000
    here = inside[middle]
    run = ndimage.label(inside == here)[0]
    return here, (run == run[middle]).sum() * 80 * h / 4000


def test_sizes_on_the_design_are_those_of_the_sheet(coarse):
    plan, part = coarse
    h = part.grid.spacing[0]
    field = lambda v, a: part.grid.origin[a] + (np.floor((v - part.grid.origin[a]) / h) + 0.5) * h  # noqa: E731
    heights = {
        "wall": plan.base_mm + 0.5 * plan.rise_mm, "gap": plan.base_mm + 0.6 * plan.rise_mm,
        "hole": plan.base_mm + 0.5 * plan.rise_mm, "strut": plan.base_mm + 0.5 * plan.rise_mm,
    }  # fmt: skip
    for row in plan.rows:
        x, y = (field(v, a) for a, v in enumerate(row.place_mm))
        if row.kind in ("wall", "gap") and row.axis in "xy":
            at, axis = (x, y, heights[row.kind]), "xy".index(row.axis)
        elif row.kind == "wall":
            at, axis = (x + 0.1 * plan.cell_mm, y, field(plan.base_mm + 0.7 * plan.rise_mm, 2)), 2
        elif row.kind == "gap":
            at, axis = (x + 0.1 * plan.cell_mm, y, field(plan.base_mm + 0.5 * plan.rise_mm, 2)), 2
        elif row.kind == "hole":
            at = (x, y, field(heights["hole"], 2))
            axis = {"x": 1, "y": 2, "z": 0}[row.axis]
        elif row.kind == "strut":
            at = (x, y, field(plan.base_mm + (0.7 if row.axis in "xy" else 0.5) * plan.rise_mm, 2))
            axis = {"x": 1, "y": 2, "z": 0}[row.axis]
        else:
            continue
        is_solid, length = solid_along(part, at, axis)
        assert is_solid == (row.kind in ("wall", "strut")), row.name
        # Half a step of the stored distance at either side, and the sampling of the line.
        assert length == pytest.approx(row.nominal_mm, abs=2 * h / 16), row.name


def test_dimensions_on_the_design(coarse):
    plan, part = coarse
    for row in plan.rows:
        if row.kind != "dimension":
            continue
        x, y = row.place_mm
        solid = part.distance < 0
        index = [
            int((v - o) / part.grid.spacing[0])
            for v, o in zip((x, y), part.grid.origin, strict=False)
        ]
        level = int((plan.base_mm + 0.2 * plan.rise_mm) / part.grid.spacing[0]) + 2
        line = {
            "x": solid[:, index[1], level], "y": solid[index[0], :, level],
            "z": solid[index[0], index[1], :],
        }[row.axis]  # fmt: skip
        runs, _ = ndimage.label(line)
        along = (*index, level)["xyz".index(row.axis)]
        here = runs[along]
        assert here > 0, row.name
        length = (runs == here).sum() * part.grid.spacing[0]
        assert length == pytest.approx(row.nominal_mm, abs=1.01 * part.grid.spacing[0]), row.name


def test_blends_and_peel_tab(coarse):
    plan, part = coarse
    fractions = {b.fraction("soft") for b in part.palette[1:]}
    assert fractions == {0.0, 0.25, 0.5, 0.75, 1.0}
    used = set(np.unique(part.labels[part.distance < 0]).tolist())
    assert used == set(range(1, len(part.palette)))
    # One piece, but for nothing: every feature stands on the plate.
    assert ndimage.label(part.distance < 0)[1] == 1
    with pytest.raises(InputError, match="needs two resins"):
        build_kit(plan, HARD)


def test_one_channel_gets_a_kit_without_blends():
    profile = STANDARD.replace(channels={"m1": "", "support": "support"})
    plan = plan_kit(profile)
    assert {r.kind for r in plan.rows} == {k for k, _ in TESTED} | {"dimension"}
    assert len(build_kit(plan, HARD).palette) == 2


def test_kit_as_a_stack(coarse, tmp_path):
    plan, part = coarse
    stack = write_stack(part, plan.profile, tmp_path / "s", support="none")
    for resin, volume in stack.designed_mm3.items():
        assert stack.volumes_mm3[resin] == pytest.approx(volume, rel=0.03)


def test_the_raster_adds_nothing_to_the_bars(coarse, tmp_path):
    # Bars are whole numbers of sites long, so a bias that is measured is the printer's.
    plan, part = coarse
    stack = write_stack(part, plan.profile, tmp_path / "s", support="none")
    level = round((plan.base_mm + 0.2 * plan.rise_mm) / stack.pitch_mm[2])
    solid = stack.layer(level) > 0
    columns = np.array([stack.layer(k) > 0 for k in range(stack.n_layers)])
    translation = stack.parts[0].raster.translation
    off = []
    for row in plan.rows:
        if row.kind != "dimension":
            continue
        i, j = (
            int((v + t) / p) - o
            for v, t, p, o in zip(
                row.place_mm, translation, stack.pitch_mm, stack.raster.offset, strict=False
            )
        )
        line = {"x": solid[:, j], "y": solid[i, :], "z": columns[:, i, j]}[row.axis]
        runs, _ = ndimage.label(line)
        at = (i, j, level)["xyz".index(row.axis)]
        pitch = stack.pitch_mm["xyz".index(row.axis)]
        off.append((runs == runs[at]).sum() - row.nominal_mm / pitch)
    assert np.abs(off).max() < 1.01  # the distance is held in sixteenths of a voxel
    assert abs(np.mean(off)) < 0.35


# ---------------------------------------------------------------- the sheet
def fill(path, *, made=lambda row: True, longer=(0.0, 0.0, 0.0), change=None, **form):
    """Fill in a sheet as someone with a calliper would."""
    with path.open(newline="", encoding="utf-8") as handle:
        rows = list(csv.DictReader(handle))
    for row in rows:
        size = float(row["nominal_mm"])
        if row["kind"] == "dimension":
            row["measured_mm"] = f"{size + longer['xyz'.index(row['axis'])]:.6f}"
        elif row["made"] == "":
            row["made"] = "yes" if made(row) else "no"
    if change:
        change(rows)
    with path.open("w", newline="", encoding="utf-8") as handle:
        table = csv.DictWriter(handle, rows[0].keys(), **form)
        table.writeheader()
        table.writerows(rows)
    return path


@pytest.fixture
def sheet(tmp_path):
    profile = sized(wall=0.4, gap=0.4, hole=0.5, strut=(0.4, 0.4, 0.6), text=0.4, feature=0.2)
    return write_sheet(plan_kit(profile.replace(bias=(0.01, 0.0, 0.0))), tmp_path)


def small_wall_lost(row):
    return row["kind"] != "wall" or float(row["nominal_mm"]) >= 0.5 - 1e-9


def test_a_printer_that_loses_thin_walls_and_prints_too_large(sheet):
    # Walls below 0.5 mm are lost; each side is 0.08 mm too far out, beyond the bias that the
    # profile states already (0.01 mm along x).
    fill(sheet, made=small_wall_lost, longer=(0.16, 0.16, 0.16))
    result = kit_result(read_sheet(sheet), DAY)
    new = result.profile
    # The smallest walls of the kit that are not below 0.5 mm: 12 and 6 sites, 17 layers.
    assert new.minimum.wall_xyz == pytest.approx((12 * 25.4 / 600, 6 * 25.4 / 300, 17 * 0.03))
    assert new.bias == pytest.approx((0.09, 0.08, 0.08))
    assert new.minimum.gap_xyz == pytest.approx(
        (5 * 25.4 / 600, 2 * 25.4 / 300, 7 * 0.03), abs=1e-6
    )  # the sheet states sizes to the nanometre
    assert new.minimum.strut_xyz == pytest.approx((0.2, 0.2, 0.3))
    assert new.minimum.feature == 0.2
    assert new.name == "invented-standard-2026-12-01"
    assert "test kit" in new.note
    assert "2026-12-01" in new.note
    assert any("gap x was made, down to 0.2117" in n for n in result.notes)
    kept = {"name", "minimum", "bias", "note"}
    for item in dataclasses.fields(new):
        if item.name not in kept:
            assert getattr(new, item.name) == getattr(STANDARD, item.name), item.name
    # A kit of the new profile: the date is replaced, not added.
    later = plan_kit(new)
    again = kit_result(read_sheet(fill(write_sheet(later, sheet.parent))), date(2027, 1, 2)).profile
    assert again.name == "invented-standard-2027-01-02"
    assert again.bias == pytest.approx(new.bias)
    assert again.note.count("test kit") == 1


def test_semicolons_and_decimal_commas(sheet):
    def commas(rows):
        for row in rows:
            row["measured_mm"] = row["measured_mm"].replace(".", ",")
            row["nominal_mm"] = row["nominal_mm"].replace(".", ",")

    fill(sheet, longer=(0.02, 0.0, -0.02), change=commas, delimiter=";")
    assert kit_result(read_sheet(sheet), DAY).profile.bias == pytest.approx((0.02, 0, -0.01))


def test_odd_sheets_are_noted(sheet):
    def odd(rows):
        for row in rows:
            if row["row"] == "wall y 0.508":
                row["made"] = "no"
        dims = [r for r in rows if (r["kind"], r["axis"]) == ("dimension", "x")]
        dims[-1]["measured_mm"] = str(float(dims[-1]["nominal_mm"]) + 0.3)

    fill(sheet, change=odd)
    result = kit_result(read_sheet(sheet), DAY)
    assert result.profile.minimum.wall_xyz == pytest.approx((0.211667, 7 * 25.4 / 300, 0.21))
    assert any("wall y 0.4233" in n and "chance" in n for n in result.notes)
    assert any("Along x the deviations differ" in n for n in result.notes)


def one(rows, name):
    return next(r for r in rows if r["row"].startswith(name))


def put(name, key, value):
    def change(rows):
        one(rows, name)[key] = value

    return change


def times(factor):
    def change(rows):
        row = one(rows, "dimension x")
        row["measured_mm"] = str(float(row["nominal_mm"]) * factor)

    return change


@pytest.mark.parametrize(
    ("change", "said"),
    [
        (put("wall x", "made", ""), r"not filled in: wall x 0\.2"),
        (put("dimension z", "measured_mm", ""), "not filled in: dimension z"),
        (put("wall x", "row", "wall w 0.2"), "does not have"),
        (lambda rows: rows.pop(3), "missing from the sheet: wall x"),
        (lambda rows: rows.append(dict(rows[0])), "stands twice"),
        (put("wall x", "nominal_mm", "0.21"), "was changed"),
        (put("wall x", "axis", "y"), "was changed"),
        (put("wall x", "made", "perhaps"), "yes or no"),
        (put("dimension x", "measured_mm", "12.5 mm"), "without a unit"),
        (put("dimension x", "measured_mm", "12,5"), "decimal point"),
        (put("dimension x", "measured_mm", "nan"), "cannot measure"),
        (times(1000), "looks like micrometres"),
        (times(1 / 25.4), "looks like inches"),
        (times(-1), "cannot measure"),
    ],
)
def test_half_filled_and_impossible_sheets(sheet, change, said):
    fill(sheet, change=change)
    with pytest.raises(InputError, match=said) as caught:
        read_sheet(sheet)
    assert caught.value.file == "sheet.csv"


def test_nothing_made_is_no_minimum(sheet):
    fill(sheet, made=lambda row: row["kind"] != "hole")
    with pytest.raises(InputError, match="larger scale"):
        kit_result(read_sheet(sheet), DAY)


def test_not_a_sheet(sheet, tmp_path):
    fill(sheet)
    other = tmp_path / "elsewhere"
    other.mkdir()
    alone = other / "sheet.csv"
    alone.write_bytes(sheet.read_bytes())
    with pytest.raises(InputError, match="missing beside the sheet"):
        read_sheet(alone)
    (other / KIT_FILE).write_text("[]")
    with pytest.raises(InputError, match="not the description"):
        read_sheet(alone)
    sheet.write_text("a,b\n1,2\n")
    with pytest.raises(InputError, match="first line"):
        read_sheet(sheet)
    sheet.write_bytes(b"\xff\xfe\x00")
    with pytest.raises(InputError, match="cannot be read"):
        read_sheet(sheet)


def test_kits_that_do_not_fit():
    with pytest.raises(InputError, match="usable tray") as caught:
        plan_kit(load_profile("invented-coarse"), scale=2)
    assert caught.value.key == "scale"
    with pytest.raises(InputError, match="scaled by"):
        plan_kit(STANDARD, scale=float("nan"))

"""Dimensions measured on a stack: a tube of known size, every kind, and what cannot be measured."""

import csv
import io
import math

import numpy as np
import pytest
from planted import STANDARD, graded_part, stack_of
from print_twins import HARD, SOFT

from voxelmat.errors import InputError
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.inspection import Dimension, Measurement
from voxelmat.model.part import Part
from voxelmat.printing.circle import fitted_circle
from voxelmat.printing.inspection import inspection_findings, measure
from voxelmat.printing.outlines import outline_deviation
from voxelmat.printing.partcheck import as_sliced
from voxelmat.printing.preflight import preflight
from voxelmat.printing.stack import write_stack
from voxelmat.printing.view import part_view
from voxelmat.shape.bodies import Body
from voxelmat.shape.pointdistance import distance_to_bodies, distance_to_mesh
from voxelmat.shape.solid import box, tube
from voxelmat.shape.voxelise import grid_for, voxelise

MESH = tube(1.5, 3.0, 0.0, 4.0, segments=256)
UP, ACROSS, MIDDLE = (0.0, 0.0, 1.0), (1.0, 0.0, 0.0), (0.0, 0.0, 2.0)
PITCH = [float(p) for p in STANDARD.pitch]


@pytest.fixture(scope="module")
def part():
    grid = grid_for(MESH, 0.25, margin_voxels=2)
    shape = voxelise(MESH, grid)
    return Part(
        grid=grid,
        resins=(HARD, SOFT),
        palette=(EMPTY, Blend.of({"hard": 1, "soft": 1})),
        labels=(shape.occupancy > 0).astype(np.uint16),
        distance=shape.distance,
        occupancy=shape.occupancy,
    )


@pytest.fixture(scope="module")
def stack(part, tmp_path_factory):
    folder = tmp_path_factory.mktemp("tube") / "s"
    return write_stack(part, STANDARD, folder, orientation=["x 90", "z 90"])


def dimension(name, kind, nominal, point=MIDDLE, direction=ACROSS, by=0.1, **more):
    return Dimension(
        name=name, kind=kind, nominal=nominal, lower=-by, upper=by, point_mm=point,
        direction=direction, **more,
    )  # fmt: skip


RING = math.pi * (3.0**2 - 1.5**2)


@pytest.mark.parametrize(
    ("made", "within"),
    [
        (dimension("bore", "hole", 3.0, (0.1, 0.0, 2.0), UP), 0.015),
        (dimension("outer", "pin", 6.0, MIDDLE, UP), 0.015),
        (dimension("across", "outside", 6.0), max(PITCH)),
        (dimension("height", "outside", 4.0, (2.2, 0.0, 2.0), UP), max(PITCH)),
        (dimension("wall", "wall", 1.5, (2.2, 0.0, 2.0)), max(PITCH)),
        (dimension("oblique", "wall", 1.5, (1.6, 1.6, 2.0), (1.0, 1.0, 0.0)), max(PITCH)),
        (dimension("gap", "gap", 3.0), max(PITCH)),
        (dimension("section", "area", RING, MIDDLE, UP, by=0.5), 0.1),
        # Volume: sharp edges are rounded between voxel centres, 57 mm of them here.
        (dimension("all of it", "volume", 4 * RING, by=2.0), 0.012 * 4 * RING),
        (dimension("half of it soft", "volume", 2 * RING, resin="soft", by=2.0), 0.012 * 2 * RING),
        (dimension("lower half", "volume", 2 * RING, by=2.0, low_mm=(-4, -4, 0),
                   high_mm=(4, 4, 2)), 0.7),
    ],
    ids=lambda v: v.name if isinstance(v, Dimension) else "",
)  # fmt: skip
def test_each_kind_on_a_tube_of_known_size(stack, made, within):
    row = measure(stack, [made])[made.name]
    assert abs(row.measured - made.nominal) <= within
    assert row.state != "out of tolerance"
    wrong = dimension("w", made.kind, made.nominal, by=0.01)
    assert Measurement(dimension=wrong, measured=1.5 * made.nominal).state == "out of tolerance"


@pytest.mark.parametrize(
    ("made", "note"),
    [
        (dimension("open", "gap", 3.0, MIDDLE, UP), "open at an end"),
        (dimension("in solid", "gap", 3.0, (2.2, 0.0, 2.0)), "lies in solid"),
        (dimension("in empty", "wall", 3.0), "lies in empty"),
        (dimension("beside", "outside", 1.0, (0.0, 9.0, 2.0)), "meets no solid"),
        (dimension("no circle", "hole", 1.0, (2.2, 0.0, 2.0), UP), "no round outline"),
        (dimension("other resin", "volume", 1.0, resin="mid"), "no channel lays 'mid'"),
    ],
    ids=lambda v: v.name if isinstance(v, Dimension) else "",
)
def test_what_cannot_be_measured_has_a_reason_and_no_value(stack, made, note):
    row = measure(stack, [made])[made.name]
    assert row.measured is None
    assert note in row.note
    assert row.state == "cannot be said"
    assert inspection_findings(measure(stack, [made]))[0].code == "dimension"


def test_near_a_limit_nothing_is_claimed():
    made = dimension("d", "wall", 1.0)
    for off, state in (
        (0.05, "in tolerance"),
        (0.09, "cannot be said"),
        (0.13, "out of tolerance"),
    ):
        row = Measurement(dimension=made, measured=1.0 + off, uncertainty=0.02)
        assert row.state == state


def test_the_sheet_as_text_html_and_csv(stack):
    sheet = measure(stack, [dimension("a <bore>", "hole", 3.0, MIDDLE, UP)])
    assert "a <bore>" in sheet.text()
    assert "a &lt;bore&gt;" in sheet.html()
    rows = list(csv.DictReader(io.StringIO(sheet.csv())))
    assert rows[0]["dimension"] == "a <bore>"
    assert float(rows[0]["measured"]) == sheet["a <bore>"].measured


def test_protected_surfaces_are_measured_against_the_design(part, stack):
    foot = np.zeros(part.grid.shape, bool)
    foot[:, :, :4] = True
    row = measure(stack, [], part=part, protected={"foot": foot})["foot"]
    assert row.dimension.kind == "surface"
    assert 0 < row.measured < 0.5 * max(PITCH)
    assert row.state == "in tolerance"


@pytest.mark.parametrize(
    ("wrong", "key"),
    [({"kind": "length"}, "kind"), ({"lower": 1.0}, "lower"),
     ({"direction": (0, 0, 0)}, "direction"), ({"nominal": math.nan}, "nominal"),
     ({"low_mm": (0, 0, 0)}, "low_mm")],
)  # fmt: skip
def test_a_dimension_that_cannot_be(wrong, key):
    given = {"name": "d", "kind": "wall", "nominal": 1.0, "lower": -0.1, "upper": 0.1, **wrong}
    with pytest.raises(InputError) as caught:
        Dimension(**given)
    assert caught.value.key == key


def test_a_circle_is_fitted_to_part_of_its_rim():
    turn = np.linspace(0, 4, 50)
    made = fitted_circle(np.column_stack([2 + 5 * np.cos(turn), -1 + 5 * np.sin(turn)]))
    assert made.radius == pytest.approx(5, abs=1e-9)
    assert made.centre == pytest.approx((2, -1), abs=1e-9)
    assert made.form < 1e-9


def test_pixels_and_millimetres_go_both_ways(stack):
    view = part_view(stack)
    pixels = np.array([[0, 0, 0], [3, 7, 11], [20, 5, 2]], float)
    points = view.to_part(pixels)
    assert np.allclose(view.to_pixels(points), pixels)
    assert np.allclose(points[1], stack.raster.pixel_to_part(3, 7, 11))


def test_distance_from_points_is_that_of_a_box():
    draw = np.random.default_rng(5).uniform(-1, 4, (200, 3))
    low, high = np.zeros(3), np.array([3.0, 2.0, 1.0])
    outside = np.maximum(np.maximum(low - draw, draw - high), 0)
    inside = np.minimum(np.minimum(draw - low, high - draw).min(axis=1), np.inf)
    wanted = np.where(inside > 0, -inside, np.linalg.norm(outside, axis=1))
    assert np.allclose(distance_to_mesh(box((3.0, 2.0, 1.0)), draw), wanted, atol=1e-6)


def test_the_outline_against_the_mesh_is_within_rounding(part, stack):
    body = Body(name="tube", mesh=MESH, material="blend")
    for bodies in ((), (body,)):
        seen = outline_deviation(stack, part, bodies=bodies)
        # Rounding to sites: at most half the largest pitch, rectangular along each axis.
        assert abs(seen.whole.mean) < 0.01
        assert seen.whole.rms < max(PITCH) / math.sqrt(12)
        assert seen.whole.p95 <= 0.5 * max(PITCH)
        assert seen.within
        assert seen.whole.fit > 0.995
        assert {c.name for c in seen.channels} == {"hard", "soft"}
        assert "mesh" in seen.against if bodies else "distance" in seen.against
    assert preflight(stack, part, bodies=[body], deep=False) == []


def test_a_mesh_that_is_not_the_design_is_seen(part, stack):
    wider = Body(name="tube", mesh=tube(1.5, 3.4, 0.0, 4.0, segments=128), material="blend")
    found = [f for f in preflight(stack, part, bodies=[wider], deep=False) if f.code == "outline"]
    assert found[0].value == pytest.approx(400, abs=60)
    assert found[0].severity == "warn"


def test_bought_in_bodies_are_cut_away():
    outer = Body(name="a", mesh=box((4.0, 4.0, 4.0)), material="hard")
    pin = Body(
        name="b", mesh=box((1.0, 1.0, 4.0), (1.5, 1.5, 0.0)), material="steel", bought_in=True,
        clearance_mm=0.25,
    )  # fmt: skip
    at = distance_to_bodies(
        [outer, pin], np.array([[2.0, 2.0, 2.0], [1.25, 2.0, 2.0], [0.5, 2, 2]])
    )
    assert at == pytest.approx([0.75, 0.0, -0.5], abs=1e-6)


def test_the_outline_is_compared_with_what_was_compensated_for_bias(tmp_path):
    part = graded_part()
    profile = STANDARD.replace(bias=(0.06, 0.06, 0.06))
    stack = write_stack(part, profile, tmp_path / "s", support="none")
    plain = outline_deviation(stack, part)
    known = outline_deviation(stack, part, printed=as_sliced(part, stack))
    assert plain.whole.mean == pytest.approx(-0.06, abs=0.01)
    assert abs(known.whole.mean) < 0.01
    assert "compensated" in known.against


def test_a_view_needs_a_name_that_the_stack_holds(tmp_path):
    stack = stack_of(graded_part(), tmp_path / "s")
    with pytest.raises(InputError, match="no part 'other'"):
        part_view(stack, "other")

"""Bodies put together: overlaps, priorities, gaps, bought-in parts."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.model.grid import VoxelGrid
from voxelmat.shape.assemble import assemble
from voxelmat.shape.bodies import Body, GapRule
from voxelmat.shape.cavity import below_plane
from voxelmat.shape.solid import box, cylinder, tube
from voxelmat.shape.voxelise import grid_for


def body(name, mesh, **more):
    return Body(name=name, mesh=mesh, material="rigid", **more)


def blocks(gap, **more):
    return [
        body("left", box((10, 10, 10)), **more),
        body("right", box((10, 10, 10), (10 + gap, 0, 0)), **more),
    ]


def volume(occupancy, grid):
    return float(occupancy.sum(dtype=np.int64)) / 255 * grid.voxel_volume


def put(bodies, spacing=0.5, **more):
    return assemble(bodies, grid_for([b.mesh for b in bodies], spacing, margin_voxels=2), **more)


def test_overlap_without_priority_names_bodies_volume_and_place():
    for priorities in ((None, None), (3, None), (2, 2)):
        pair = [
            body(b.name, b.mesh, priority=p) for b, p in zip(blocks(-2.0), priorities, strict=True)
        ]
        with pytest.raises(InputError) as caught:
            put(pair)
        text = str(caught.value)
        assert "'left' and 'right' overlap by 200 mm^3" in text
        assert "most at (8.75, 4.75, 4.75) mm" in text
        assert "priority" in text


def test_higher_priority_wins_the_overlap():
    pair = [
        body("left", box((10, 10, 10)), priority=1),
        body("right", box((10, 10, 10), (8, 0, 0)), priority=5),
    ]
    for several in (pair, pair[::-1]):
        result = put(several)
        names = [b.name for b in several]
        for name, share in (("left", 800), ("right", 1000)):
            mine = (result.owner == names.index(name) + 1).sum() * result.grid.voxel_volume
            assert mine == pytest.approx(share)
        (event,) = result.report
        assert event.kind == "overlap"
        assert event.volume_mm3 == pytest.approx(200)
        assert "belongs to 'right'" in event.message


def test_touching_bodies_join_without_a_crack():
    # The common wall lies on voxel centres: there the lesser of both distances is 0.
    pair = [
        body("left", box((10.25, 10, 10))),
        body("right", box((9.75, 10, 10), (10.25, 0, 0))),
    ]
    result = put(pair)
    assert result.report == ()
    assert volume(result.occupancy, result.grid) == pytest.approx(2000, rel=1e-3)
    inside = result.occupancy == 255
    assert (result.distance[inside] <= -8).all()
    assert ((result.owner > 0) == (result.occupancy > 0)).all()


@settings(deadline=None, max_examples=8)
@given(at=st.floats(4.0, 6.0), low=st.floats(-0.4, 0.4))
def test_a_cut_block_is_the_whole_block(at, low):
    whole = body("whole", box((10, 6, 6), (low, low, low)))
    parts = [
        body("a", box((at, 6, 6), (low, low, low))),
        body("b", box((10 - at, 6, 6), (low + at, low, low))),
    ]
    grid = VoxelGrid(shape=(24, 16, 16), spacing=(0.5, 0.5, 0.5), origin=(-1, -1, -1))
    one, two = assemble([whole], grid), assemble(parts, grid)
    off = two.occupancy.astype(int) - one.occupancy
    assert np.abs(off).max() <= 1
    # Beside the wall between them the joint outline stays where it was, within a quarter voxel.
    near = (np.abs(one.distance) <= 8) & (np.abs(two.distance) < 16)
    assert np.abs(one.distance.astype(int) - two.distance)[near].max() <= 4


def test_narrow_gap_closes_to_the_named_side():
    for side, number in (("left", 1), ("right", 2)):
        rule = GapRule(first="left", second="right", width_mm=0.4, give_to=side)
        result = put(blocks(0.3), gaps=[rule])
        (event,) = result.report
        assert event.kind == "gap"
        assert event.volume_mm3 == pytest.approx(30, rel=0.01)
        assert f"given to '{side}'" in event.message
        assert volume(result.occupancy, result.grid) == pytest.approx(2030, rel=1e-3)
        assert result.print_occupancy is not result.occupancy
        assert (result.print_occupancy == result.occupancy).all()
        x, y, z = result.grid.index_of((10.15, 5, 5))
        assert result.owner[x, y, z] == number
        assert (result.distance[x - 1 : x + 2, y, z] <= -8).all()
        # Nothing grows beside the gap, above the common top.
        above = result.occupancy[:, :, result.grid.index_of((5, 5, 10.1))[2]]
        assert not above.any()


def test_wider_gap_stays_open_and_is_told():
    rule = GapRule(first="left", second="right", width_mm=0.4, give_to="left")
    result = put(blocks(0.6), gaps=[rule])
    assert volume(result.occupancy, result.grid) == pytest.approx(2000, rel=1e-3)
    assert "No gap narrower" in result.report[0].message


def test_round_gap_between_pin_and_sleeve():
    pin, sleeve = cylinder(4, 0, 10, 96), tube(4.3, 8, 0, 10, 96)
    rule = GapRule(first="pin", second="sleeve", width_mm=0.5, give_to="sleeve")
    result = put([body("pin", pin), body("sleeve", sleeve)], 0.4, gaps=[rule])
    ring = 10 * 48 * (4.3**2 - 4**2) * math.sin(2 * math.pi / 96)
    assert result.report[0].volume_mm3 == pytest.approx(ring, rel=0.03)
    assert volume(result.occupancy, result.grid) == pytest.approx(
        pin.volume + sleeve.volume + ring, rel=2e-3
    )


def test_bought_in_body_is_solved_but_not_printed():
    shaft, grip = cylinder(2, -12, 12, 96), cylinder(8, -10, 10, 96)
    bodies = [
        body("shaft", shaft, bought_in=True, clearance_mm=0.3),
        body("grip", grip, priority=9),
    ]
    result = put(bodies, 0.25)
    both = grip.volume + shaft.volume * 4 / 24
    assert volume(result.occupancy, result.grid) == pytest.approx(both, rel=1e-3)
    left = grip.volume - cylinder(2.3, -10, 10, 96).volume
    assert volume(result.print_occupancy, result.grid) == pytest.approx(left, rel=1e-3)
    axis = result.grid.index_of((0.0, 0.0, 0.0))
    assert result.owner[axis] == 1
    assert result.print_owner[axis] == 0
    assert result.print_distance[axis] > 16
    # 2.25 mm from the axis is inside the grip but within the play; 2.5 mm is printed.
    play = result.grid.index_of((2.14, 0.01, 0.01))
    assert result.print_distance[play] > 0
    solid = result.grid.index_of((2.6, 0.01, 0.01))
    assert result.print_distance[solid] < 0
    assert set(np.unique(result.print_owner)) == {0, 2}
    assert ((result.print_owner > 0) == (result.print_occupancy > 0)).all()
    kinds = [event.kind for event in result.report]
    assert kinds == ["overlap", "cavity"]
    assert "it is bought in" in result.report[0].message


def test_a_drawn_clearance_closes_for_the_solve_and_stays_in_the_print():
    pin, sleeve = cylinder(4, 0, 10, 96), tube(4.3, 8, 0, 10, 96)
    bodies = [body("pin", pin, bought_in=True, clearance_mm=0.3), body("sleeve", sleeve)]
    rule = GapRule(first="pin", second="sleeve", width_mm=0.5, give_to="sleeve")
    result = put(bodies, 0.4, gaps=[rule])
    whole = cylinder(8, 0, 10, 96)
    assert volume(result.occupancy, result.grid) == pytest.approx(whole.volume, rel=2e-3)
    assert volume(result.print_occupancy, result.grid) == pytest.approx(sleeve.volume, rel=3e-3)
    assert [event.kind for event in result.report] == ["gap", "cavity"]
    # Given to the pin instead, the gap is never printed in the first place.
    rule = GapRule(first="pin", second="sleeve", width_mm=0.5, give_to="pin")
    result = put(bodies, 0.4, gaps=[rule])
    assert volume(result.occupancy, result.grid) == pytest.approx(whole.volume, rel=2e-3)
    assert volume(result.print_occupancy, result.grid) == pytest.approx(sleeve.volume, rel=3e-3)


def test_cavity_without_clearance_is_exact():
    pin, block = cylinder(2, -5, 5, 48), box((10, 10, 10), (-5, -5, -5))
    result = put([body("pin", pin, bought_in=True), body("block", block)], 0.4)
    assert volume(result.print_occupancy, result.grid) == pytest.approx(1000 - pin.volume, rel=1e-3)


@pytest.mark.nojit
@settings(deadline=None, max_examples=25)
@given(
    normal=st.tuples(*[st.floats(-1, 1)] * 3).filter(lambda n: math.hypot(*n) > 0.1),
    height=st.floats(-1, 1),
    spacing=st.tuples(*[st.floats(0.3, 2.0)] * 3),
)
def test_fraction_below_a_plane(normal, height, spacing):
    unit = np.array(normal) / math.hypot(*normal)
    n = 40
    axes = [h * ((np.arange(n) + 0.5) / n - 0.5) for h in spacing]
    x, y, z = np.meshgrid(*axes, indexing="ij", sparse=True)
    counted = (unit[0] * x + unit[1] * y + unit[2] * z + height < 0).mean()
    exact = below_plane(np.array([height]), unit[None], spacing)[0]
    # A count of n^3 points misses up to half a layer of them.
    assert exact == pytest.approx(counted, abs=1 / n)


def test_three_bodies_of_falling_priority():
    bodies = [
        body("a", box((6, 6, 6)), priority=1),
        body("b", box((6, 6, 6), (3, 0, 0)), priority=3),
        body("c", box((6, 6, 6), (1, 3, 0)), priority=2),
    ]
    result = put(bodies, 1.0)
    x, y, z = np.meshgrid(*result.grid.centres(), indexing="ij")
    expected = np.zeros(result.grid.shape, dtype=int)
    for n in (0, 2, 1):
        low = bodies[n].mesh.bounds[0]
        high = bodies[n].mesh.bounds[1]
        held = (x > low[0]) & (x < high[0]) & (y > low[1]) & (y < high[1])
        expected[held & (z > low[2]) & (z < high[2])] = n + 1
    assert (result.owner == expected).all()
    assert len(result.report) == 3


def test_body_reaching_beyond_the_grid_is_told():
    grid = VoxelGrid(shape=(4, 4, 4), spacing=(1, 1, 1))
    result = assemble([body("long", box((9, 4, 4)))], grid)
    assert "beyond the grid" in result.report[0].message


@pytest.mark.parametrize(
    ("make", "text"),
    [
        (
            lambda: assemble([], VoxelGrid(shape=(1,) * 3, spacing=(1,) * 3)),
            "at least one body",
        ),
        (lambda: put([*blocks(1), *blocks(1)]), "different names"),
        (lambda: put([body("pin", box((1, 1, 1)), bought_in=True)]), "nothing to print"),
        (lambda: body("pin", box((1, 1, 1)), clearance_mm=0.2), "only a bought-in body"),
        (lambda: body("pin", box((1, 1, 1)), bought_in=True, clearance_mm=-1), "0 mm or more"),
        (lambda: body("", box((1, 1, 1))), "needs a name"),
        (lambda: GapRule(first="a", second="b", width_mm=0, give_to="a"), "above 0"),
        (lambda: GapRule(first="a", second="a", width_mm=1, give_to="a"), "two bodies"),
        (lambda: GapRule(first="a", second="b", width_mm=1, give_to="c"), "one of them"),
        (
            lambda: put(
                blocks(1), gaps=[GapRule(first="left", second="top", width_mm=1, give_to="left")]
            ),
            "'top'",
        ),
        (
            lambda: put(
                blocks(1), gaps=[GapRule(first="left", second="right", width_mm=9, give_to="left")]
            ),
            "spacing",
        ),
        (
            lambda: put(
                [
                    body("pin", box((1, 1, 1)), bought_in=True, clearance_mm=9),
                    body("block", box((4, 4, 4))),
                ]
            ),
            "too wide",
        ),
        (
            lambda: assemble(
                [body("far", box((1, 1, 1), (50, 0, 0)))],
                VoxelGrid(shape=(4,) * 3, spacing=(1,) * 3),
            ),
            "outside the grid",
        ),
    ],
)
def test_bad_assemblies_are_refused(make, text):
    with pytest.raises(InputError, match=text):
        make()

"""Loads on regions: resultants, moments, shares, and errors for empty space."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.fea.assemble import assemble
from voxelmat.fea.loads import nodal_load, spread
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.loadcase import (
    BodyForce,
    Force,
    GroundSpring,
    LoadCase,
    Pressure,
    PressureMap,
    Support,
)
from voxelmat.model.part import DISTANCE_STEPS, Part
from voxelmat.model.region import Box, FaceRegion, HalfSpace, Sphere


def ball(grid, resin, n=24, radius=1.0):
    """A ball in the middle of its box, with distance and occupancy."""
    h = 2.2 * radius / n
    g = grid(n, n, n, spacing=(h, h, h), origin=(-1.1 * radius,) * 3)
    x, y, z = np.meshgrid(*g.centres(), indexing="ij")
    away = np.sqrt(x**2 + y**2 + z**2) - radius
    labels = (away < 0).astype(np.uint16)
    steps = np.clip(np.rint(away * DISTANCE_STEPS / h), -127, 127).astype(np.int8)
    palette = (EMPTY, Blend.pure("rigid-example"))
    return Part(grid=g, resins=(resin(),), palette=palette, labels=labels, distance=steps)


def moments(part, load):
    """Sum of r x f about the origin."""
    nx, ny, _ = part.grid.node_shape
    k, rest = np.divmod(load.node, nx * ny)
    j, i = np.divmod(rest, nx)
    place = np.stack([c[n] for c, n in zip(part.grid.nodes(), (i, j, k), strict=True)], axis=1)
    return np.cross(place, load.force).sum(axis=0)


EVERYWHERE = Box(name="all", low=(-50.0, -50.0, -50.0), high=(50.0, 50.0, 50.0))


def test_pressure_acts_on_the_projected_area(grid, resin):
    # The resultant of p on a half sphere is p pi R^2 (formula); the staircase area of a sphere is
    # 1.503 times its area (check B3), so weighting by it would give half as much again.
    part = ball(grid, resin)
    upper = HalfSpace(name="upper", point=(0, 0, 0), normal=(0, 0, 1))
    load = nodal_load(part, Pressure(region=upper, pressure=2.0), "load 1")
    x, y, z = load.resultant
    assert z == pytest.approx(-2.0 * np.pi, rel=0.02)
    assert abs(x) < 1e-9
    assert abs(y) < 1e-9


def test_pressure_all_round_has_no_resultant(grid, resin):
    load = nodal_load(ball(grid, resin), Pressure(region=EVERYWHERE, pressure=2.0), "load 1")
    np.testing.assert_allclose(load.resultant, 0.0, atol=1e-9)
    assert np.abs(load.force).sum() > 1.0


@settings(deadline=None, max_examples=15)
@given(st.tuples(*[st.floats(-5, 5)] * 3), st.integers(0, 5))
def test_force_keeps_its_resultant_and_line_of_action(grid, resin, vector, side):
    part = Part.uniform(grid(3, 4, 2, spacing=(1.0, 0.5, 2.0)), resin())
    region = FaceRegion(name="f", side="xyz"[side // 2] + "-+"[side % 2])
    load = nodal_load(part, Force(region=region, vector=vector), "load 1")
    np.testing.assert_allclose(load.resultant, vector, atol=1e-12)
    centre = np.array([1.5, 1.0, 2.0])
    centre[side // 2] *= 2 * (side % 2)
    np.testing.assert_allclose(moments(part, load), np.cross(centre, vector), atol=1e-9)


def test_force_follows_the_true_area_of_a_ball(grid, resin):
    # The share of a spherical surface above height z is (1 - z / R) / 2 (Archimedes' hat-box
    # theorem); faces between two node planes are shared by them, so the cut lies between.
    part = ball(grid, resin, n=40)
    node, share = spread(part, EVERYWHERE, "load 1")
    nx, ny, _ = part.grid.node_shape
    height = part.grid.nodes()[2][node // (nx * ny)]
    assert share.sum() == pytest.approx(1.0)
    assert share[height > 1e-9].sum() + share[np.abs(height) < 1e-9].sum() / 2 == pytest.approx(0.5)
    lowest = height[height > 0.5].min() - part.grid.spacing[2] / 2
    assert share[height > 0.5].sum() == pytest.approx((1 - lowest) / 2, abs=0.005)


def test_force_inside_the_part_goes_by_volume(grid, resin):
    part = Part.uniform(grid(6, 6, 6), resin())
    node, share = spread(part, Box(name="core", low=(2, 2, 2), high=(4, 4, 4)), "load 1")
    assert len(node) == 27
    assert share.max() == pytest.approx(1 / 8)


def test_force_on_a_single_node(grid, resin):
    part = Part.uniform(grid(4, 4, 4), resin())
    load = nodal_load(
        part, Force(region=Sphere(name="p", centre=(2, 2, 2), radius=0.1), vector=(1, 0, 0)), "l"
    )
    assert load.force.shape == (1, 3)


def test_body_force_is_mass_times_acceleration(grid, resin):
    part = Part.uniform(grid(3, 2, 4, spacing=(1.0, 2.0, 0.5)), resin())
    load = nodal_load(part, BodyForce(acceleration=(0.0, 0.0, -9806.65)), "load 1")
    assert load.resultant[2] == pytest.approx(-part.mass * 9806.65)
    np.testing.assert_allclose(
        moments(part, load), np.cross((1.5, 2.0, 1.0), load.resultant), atol=1e-12
    )


def pressure_map(region, **changes):
    base = {
        "region": region,
        "values": np.full((4, 3), 0.5),
        "cell": (1.0, 1.0),
        "side": "z+",
        "first_cell": (0.5, 0.5),
        "column_direction": "x+",
        "row_direction": "y+",
    }
    return PressureMap(**{**base, **changes})


def test_pressure_map_presses_what_it_covers(grid, resin):
    part = Part.uniform(grid(3, 4, 2), resin())
    load = nodal_load(part, pressure_map(EVERYWHERE, expected_force=6.0), "load 1")
    np.testing.assert_allclose(load.resultant, (0, 0, -6.0), atol=1e-12)
    assert load.cautions == ()


def test_pressure_map_finer_than_voxels_keeps_its_resultant(grid, resin):
    part = Part.uniform(grid(3, 2, 2, spacing=(1.0, 2.0, 1.0)), resin())
    values = np.zeros((8, 6))
    values[3, 2] = 8.0  # one hot cell of .5 x .5 mm
    load = nodal_load(
        part, pressure_map(EVERYWHERE, values=values, cell=(0.5, 0.5), first_cell=(0.25, 0.25)), "l"
    )
    assert load.resultant[2] == pytest.approx(-2.0)


def test_pressure_map_cautions(grid, resin):
    part = Part.uniform(grid(3, 2, 2), resin())
    load = nodal_load(part, pressure_map(EVERYWHERE, expected_force=6.0), "load 1")
    assert "3 N of the map's 6 N reach the part" in load.cautions[0]
    assert "expected_force is 6 N" in load.cautions[1]
    with pytest.raises(InputError, match="no cell of the map with pressure lies over the part"):
        nodal_load(part, pressure_map(EVERYWHERE, first_cell=(90.0, 0.5)), "load 1")


def test_pressure_map_along_a_side_of_a_ball(grid, resin):
    part = ball(grid, resin)
    values = np.full((4, 4), 0.5)
    for acts in ("normal", "along"):
        load = nodal_load(
            part, pressure_map(EVERYWHERE, values=values, first_cell=(-1.5, -1.5), acts=acts), "l"
        )
        # p pi R^2 on what is seen from above (formula)
        assert load.resultant[2] == pytest.approx(-0.5 * np.pi, rel=0.02)
        if acts == "along":
            assert not load.force[:, :2].any()


NOWHERE = Box(name="nowhere", low=(90.0, 90.0, 90.0), high=(91.0, 91.0, 91.0))


@pytest.mark.parametrize(
    "load",
    [
        Force(region=NOWHERE, vector=(1, 0, 0)),
        Pressure(region=NOWHERE, pressure=1.0),
        BodyForce(region=NOWHERE, acceleration=(0, 0, 1)),
        GroundSpring(region=NOWHERE, stiffness=(1, 1, 1)),
        pressure_map(NOWHERE),
    ],
)
def test_a_load_on_empty_space_is_an_error(grid, resin, load):
    part = Part.uniform(grid(2, 2, 2), resin())
    with pytest.raises(InputError, match=r"Load 1, .* on 'nowhere': .*'nowhere'"):
        assemble(part, LoadCase(name="a", loads=(load,)))


def test_a_support_on_empty_space_is_an_error(grid, resin):
    part = Part.uniform(grid(2, 2, 2), resin())
    with pytest.raises(InputError, match=r"support 1 on 'nowhere': the region holds no node"):
        assemble(part, LoadCase(name="a", supports=(Support(region=NOWHERE),)))


def test_supports_that_contradict(grid, resin):
    part = Part.uniform(grid(2, 2, 2), resin())
    face = FaceRegion(name="face", side="x-")
    edge = Box(name="edge", low=(-0.1, -0.1, -0.1), high=(0.1, 0.1, 5.0))
    case = LoadCase(
        name="a", supports=(Support(region=face), Support(region=edge, displacement=(0, 0, 0.5)))
    )
    with pytest.raises(InputError, match=r"support 2 on 'edge' gives 0.5 mm along z at 3 nodes"):
        assemble(part, case)
    same = LoadCase(name="a", supports=(Support(region=face), Support(region=edge)))
    assert assemble(part, same).held.sum() == 27


def test_springs_share_their_stiffness(grid, resin):
    part = Part.uniform(grid(2, 3, 2), resin())
    spring = GroundSpring(region=FaceRegion(name="floor", side="z-"), stiffness=(0.0, 3.0, 12.0))
    acts = assemble(part, LoadCase(name="a", loads=(spring,)))
    np.testing.assert_allclose(acts.springs.sum(axis=(1, 2, 3)), (0.0, 3.0, 12.0))
    assert acts.springs[2, 0, 0, 0] == pytest.approx(12.0 / 6 / 4)

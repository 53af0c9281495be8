"""Foundations, given rotations, symmetry planes and the averages of regions."""

import numpy as np
import pytest

from voxelmat.errors import InputError
from voxelmat.fea.static import solve
from voxelmat.model.averages import mean_motion, mean_strain, mean_stress
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.loadcase import (
    BodyForce,
    Force,
    Foundation,
    GroundSpring,
    LoadCase,
    Plate,
    Pressure,
    Support,
)
from voxelmat.model.part import DISTANCE_STEPS, Part
from voxelmat.model.region import Box, FaceRegion, Sphere
from voxelmat.model.symmetry import symmetry_support

LOW, HIGH = FaceRegion(name="low", side="z-"), FaceRegion(name="high", side="z+")
EVERYWHERE = Box(name="all", low=(-99, -99, -99), high=(99, 99, 99))


# ------------------------------------------------------------------ foundations
@pytest.mark.parametrize("acts", ["normal", "all"])
def test_block_on_a_bed_sinks_by_springs_in_series(grid, resin, acts):
    """p / k + p t / E at nu 0 (formula)."""
    part = Part.uniform(grid(2, 3, 4, spacing=(1.0, 0.5, 1.0)), resin(E=5.0, nu=0.0))
    sides = (symmetry_support("x-"), symmetry_support("y-")) if acts == "normal" else ()
    bed = Foundation(region=LOW, stiffness=0.5, acts=acts)
    case = LoadCase(name="c", supports=sides, loads=(Pressure(region=HIGH, pressure=0.1), bed))
    result = solve(part, case, tol=1e-12)
    np.testing.assert_allclose(result.displacement[..., -1, 2], -(0.2 + 0.08), rtol=1e-9)
    assert result.reactions["load 2, foundation on 'low'"][2] == pytest.approx(0.1 * 3, rel=1e-9)
    assert result.balance < 1e-10
    assert result.moment_balance < 1e-10


# Check J1: pad of layers t 4 and 6, E 1 and 10: p / d .217391 unconfined (nu 0), .292642 laterally
# confined at nu .3 (formula).
@pytest.mark.parametrize(("nu", "confined", "expected"), [
    (0.0, False, 0.217391), (0.3, True, 0.292642),
])  # fmt: skip
def test_layered_pad(grid, resin, nu, confined, expected):
    labels = np.ones((2, 2, 10), dtype=np.uint16)
    labels[:, :, 4:] = 2
    part = Part(grid=grid(2, 2, 10), resins=(resin("soft", 1.0, nu), resin("hard", 10.0, nu)),
                palette=(EMPTY, Blend.pure("soft"), Blend.pure("hard")), labels=labels)  # fmt: skip
    walls = tuple(symmetry_support(a + s) for a in "xy" for s in ("-+" if confined else "-"))
    case = LoadCase(name="c", supports=(*walls, symmetry_support("z-")),
                    loads=(Pressure(region=HIGH, pressure=1.0),))  # fmt: skip
    depth = -solve(part, case, tol=1e-12).displacement[..., -1, 2]
    np.testing.assert_allclose(1.0 / depth, expected, rtol=3e-6)


def ball(grid, resin, n):
    """A ball of radius 1, stiff, with its signed distance."""
    h = 2.2 / n
    g = grid(n, n, n, spacing=(h, h, h), origin=(-1.1,) * 3)
    x, y, z = np.meshgrid(*g.centres(), indexing="ij")
    away = np.sqrt(x**2 + y**2 + z**2) - 1.0
    steps = np.clip(np.rint(away * DISTANCE_STEPS / h), -127, 127).astype(np.int8)
    return Part(grid=g, resins=(resin("rigid-example", 1e4),), distance=steps,
                labels=(away < 0).astype(np.uint16),
                palette=(EMPTY, Blend.pure("rigid-example")))  # fmt: skip


@pytest.mark.parametrize(("acts", "stiffness"), [
    ("normal", 4 * np.pi / 3), ("all", 4 * np.pi),
])  # fmt: skip
def test_bed_round_a_ball_has_the_true_area(grid, resin, acts, stiffness):
    # k integral n n dA = k 4 pi R^2 / 3 along an axis, k 4 pi R^2 in all directions (formula). By
    # the area of the steps, 1.503 times as much (check B3), both would be half as stiff again.
    part = ball(grid, resin, 16)
    loads = (
        Force(region=Sphere(name="core", centre=(0, 0, 0), radius=0.4), vector=(0.6, 0.8, 0)),
        Foundation(region=EVERYWHERE, stiffness=1.0, acts=acts),
        GroundSpring(region=EVERYWHERE, stiffness=(1e-7,) * 3),  # no rotation about the centre
    )
    result = solve(part, LoadCase(name="c", loads=loads))
    moved = mean_motion(result, Sphere(name="core", centre=(0, 0, 0), radius=0.5)).translation
    # along the force though that is along no axis: directions are coupled as they should be
    np.testing.assert_allclose(moved, np.array([0.6, 0.8, 0.0]) / stiffness, rtol=0.02, atol=1e-5)
    assert result.balance < 1e-7
    # the ball turns freely on a normal bed but for a trifle of a spring, which holds: no caution;
    # without it the normals' rounding would hold it
    if acts == "normal":
        alone = solve(part, LoadCase(name="c", loads=loads[:2]))
        caution = next(c for c in alone.cautions if "slides freely" in c)
        assert "rotation along" not in caution
        assert "hardly holds rotation about x, rotation about y, rotation about z;" in caution


def test_leaning_bed_leaves_the_slope_free(grid, resin):
    """On a 45 degree slope a normal bed gives no force along the slope."""
    n = 6
    i, _, k = np.indices((n, 2, n))
    labels = (i + k < n).astype(np.uint16)
    away = ((i + k - (n - 1)) / np.sqrt(2.0)) * DISTANCE_STEPS
    part = Part(grid=grid(n, 2, n), resins=(resin(),), labels=labels,
                distance=np.clip(np.rint(away), -127, 127).astype(np.int8),
                palette=(EMPTY, Blend.pure("rigid-example")))  # fmt: skip
    slope = Box(name="slope", low=(0.4, -1, 0.4), high=(9, 9, 9))
    shift = np.array([0.01, 0.0, -0.01])  # along the slope
    down = LoadCase(name="c", supports=(Support(region=EVERYWHERE, displacement=tuple(shift)),),
                    loads=(Foundation(region=slope, stiffness=3.0),))  # fmt: skip
    slid = solve(part, down).reactions["load 1, foundation on 'slope'"]
    push = LoadCase(name="c", supports=(Support(region=EVERYWHERE, displacement=(0.01, 0, 0.01)),),
                    loads=(Foundation(region=slope, stiffness=3.0),))  # fmt: skip
    pressed = solve(part, push).reactions["load 1, foundation on 'slope'"]
    assert np.linalg.norm(slid) < 1e-2 * np.linalg.norm(pressed)
    assert pressed[0] == pytest.approx(pressed[2], rel=1e-9)
    assert pressed[0] < 0


def test_bad_foundations(grid, resin):
    with pytest.raises(InputError, match="above 0 N/mm"):
        Foundation(region=LOW, stiffness=0.0)
    part = Part.uniform(grid(4, 4, 4), resin())
    inside = Box(name="inside", low=(1, 1, 1), high=(3, 3, 3))
    with pytest.raises(InputError, match="no exposed surface"):
        solve(part, LoadCase(name="c", supports=(Support(region=LOW),),
                             loads=(Foundation(region=inside, stiffness=1.0),)))  # fmt: skip


# ------------------------------------------------------------------ given rotation
ABOUT, TURN, SHIFT = (1.0, 2.0, 3.0), (0.01, -0.02, 0.03), (0.1, 0.2, 0.3)


@pytest.mark.parametrize("by", ["support", "plate"])
def test_given_rigid_motion_strains_nothing(grid, resin, by):
    part = Part.uniform(grid(4, 3, 5, spacing=(1.0, 0.5, 2.0)), resin())
    if by == "support":
        turned = Support(region=HIGH, displacement=SHIFT, rotation=TURN, about=ABOUT)
        case = LoadCase(name="c", supports=(turned,))
    else:
        turned = Plate(name="p", region=HIGH, point=ABOUT, translation=SHIFT, rotation=TURN)
        case = LoadCase(name="c", plates=(turned,))
    result = solve(part, case, tol=1e-13)
    assert np.abs(result.strain).max() < 1e-12
    place = np.stack(np.meshgrid(*part.grid.nodes(), indexing="ij"), axis=-1)
    expected = np.array(SHIFT) + np.cross(TURN, place - np.array(ABOUT))
    np.testing.assert_allclose(result.displacement, expected, atol=1e-12)


def test_torque_of_a_turned_end(grid, resin):
    """A turned end takes the moment that a plate needs for the same turn; it balances."""
    part = Part.uniform(grid(4, 4, 6), resin())
    turned = Support(region=HIGH, rotation=(0, 0, 0.01), about=(2, 2, 6))
    foot = Support(region=LOW, about=(2, 2, 0))
    result = solve(part, LoadCase(name="c", supports=(foot, turned)), tol=1e-11)
    top, bottom = (result.reaction_moments[f"support {n} on '{w}'"][2]
                   for n, w in ((2, "high"), (1, "low")))  # fmt: skip
    assert top == pytest.approx(-bottom, rel=1e-8)
    assert result.energy == pytest.approx(0.5 * top * 0.01, rel=1e-8)
    plate = Plate(name="p", region=HIGH, point=(2, 2, 6), moment=(0, 0, top))
    back = solve(part, LoadCase(name="c", supports=(foot,), plates=(plate,)), tol=1e-11)
    assert back.plates["p"].rotation[2] == pytest.approx(0.01, rel=1e-8)


def test_two_supports_may_agree_and_not_disagree(grid, resin):
    part = Part.uniform(grid(3, 3, 3), resin())
    one = Support(region=LOW, rotation=(0, 0, 0.01))
    edge = Box(name="edge", low=(-1, -1, -1), high=(0.1, 9, 0.1))
    solve(part, LoadCase(name="c", supports=(one, Support(region=edge, rotation=(0, 0, 0.01)))))
    with pytest.raises(InputError, match="gives 0 mm along x at 3 nodes"):
        solve(part, LoadCase(name="c", supports=(one, Support(region=edge))))


# ------------------------------------------------------------------ symmetry
def test_half_a_part_is_half_of_the_whole(grid, resin):
    labels = np.random.default_rng(4).integers(1, 3, size=(3, 3, 4)).astype(np.uint16)
    palette, resins = (EMPTY, Blend.pure("a"), Blend.pure("b")), (resin("a", 1.0), resin("b", 9.0))
    half = Part(grid=grid(3, 3, 4), resins=resins, palette=palette, labels=labels)
    whole = Part(grid=grid(6, 3, 4, origin=(-3.0, 0, 0)), resins=resins, palette=palette,
                 labels=np.concatenate([labels[::-1], labels]))  # fmt: skip
    foot, load = Support(region=LOW), Pressure(region=HIGH, pressure=0.01)
    a = solve(whole, LoadCase(name="w", supports=(foot,), loads=(load,)), tol=1e-11)
    mirrored = symmetry_support("x-", 0.0)
    b = solve(half, LoadCase(name="h", supports=(foot, mirrored), loads=(load,)), tol=1e-11)
    np.testing.assert_allclose(b.displacement, a.displacement[3:], atol=1e-9)
    assert b.energy == pytest.approx(a.energy / 2, rel=1e-8)


def test_a_plane_that_misses_the_part_is_refused(grid, resin):
    part = Part.uniform(grid(3, 3, 3), resin())
    for at, why in ((-0.5, "ends before it"), (0.5, "goes through it")):
        case = LoadCase(name="c", supports=(symmetry_support("x-", at), Support(region=LOW)),
                        loads=(Pressure(region=HIGH, pressure=1.0),))  # fmt: skip
        with pytest.raises(InputError, match=why):
            solve(part, case)


# ------------------------------------------------------------------ averages
def test_averages_of_a_pulled_bar(grid, resin):
    part = Part.uniform(grid(8, 2, 2), resin(E=2000.0, nu=0.3))
    pulled = LoadCase(name="c", supports=(symmetry_support("x-"), symmetry_support("y-"),
        symmetry_support("z-")), loads=(Pressure(
            region=FaceRegion(name="end", side="x+"), pressure=-5.0),))  # fmt: skip
    result = solve(part, pulled, tol=1e-11)
    where = Box(name="mid", low=(2, -1, -1), high=(6, 3, 3))
    np.testing.assert_allclose(mean_stress(result, where), (5, 0, 0, 0, 0, 0), atol=1e-5)
    strain = mean_strain(result, where)
    np.testing.assert_allclose(strain, (2.5e-3, -7.5e-4, -7.5e-4, 0, 0, 0), atol=1e-8)
    end = mean_motion(result, FaceRegion(name="end", side="x+"))
    assert end.translation[0] == pytest.approx(8 * 2.5e-3, rel=1e-9)
    np.testing.assert_allclose(end.rotation, 0.0, atol=1e-9)
    # what no rigid motion explains: the end grows narrower by .75e-3 of its distance to the middle
    assert end.left == pytest.approx(7.5e-4 * np.sqrt(2 * 2 / 3), rel=1e-6)


def test_averages_weigh_by_material_and_refuse_empty_regions(grid, resin):
    part = Part.uniform(grid(2, 1, 1), resin(nu=0.0))
    part = part.replace(occupancy=np.array([255, 51], dtype=np.uint8).reshape(2, 1, 1))
    case = LoadCase(
        name="c",
        supports=(Support(region=FaceRegion(name="x", side="x-")),),
        loads=(Force(region=FaceRegion(name="end", side="x+"), vector=(10.0, 0, 0)),),
    )
    result = solve(part, case)
    e = result.strain[:, 0, 0, 0]
    assert mean_strain(result, EVERYWHERE)[0] == pytest.approx((e[0] + 0.2 * e[1]) / 1.2, rel=1e-6)
    nowhere = Box(name="nowhere", low=(50,) * 3, high=(51,) * 3)
    for ask in (mean_motion, mean_strain, mean_stress):
        with pytest.raises(InputError, match="'nowhere' holds no"):
            ask(result, nowhere)


def test_weight_alone_is_a_load(grid, resin):
    part = Part.uniform(grid(2, 2, 3), resin())
    gravity = BodyForce(acceleration=(0, 0, -9806.65))
    result = solve(part, LoadCase(name="c", supports=(Support(region=LOW),), loads=(gravity,)))
    weight = 12 * 1.1e-9 * 9806.65
    assert result.reactions["support 1 on 'low'"][2] == pytest.approx(weight, rel=1e-7)

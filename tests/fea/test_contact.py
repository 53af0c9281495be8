"""A rigid body pressed on a part: what must always hold, and what is refused."""

import numpy as np
import pytest
from held_floor import FLOOR, slides
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import ConvergenceError, InputError
from voxelmat.fea.active_set import Pressed
from voxelmat.fea.contact import contact, press
from voxelmat.fea.contact_static import static_result
from voxelmat.fea.contact_surface import touch_surface
from voxelmat.fea.static import solve
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.indenter import CylinderIndenter, FlatPunch, MeshIndenter, SphereIndenter
from voxelmat.model.loadcase import (
    BodyForce,
    Foundation,
    GroundSpring,
    InitialStrain,
    LoadCase,
    Support,
)
from voxelmat.model.mesh import TriangleMesh
from voxelmat.model.part import Part
from voxelmat.model.plate import Plate
from voxelmat.model.region import FaceRegion


def test_plane_on_a_confined_column_is_the_linear_answer(grid, resin):
    part = Part.uniform(grid(3, 4, 5, spacing=(1.0, 0.5, 0.8)), resin(E=10.0, nu=0.3))
    supports = slides("x-", "x+", "y-", "y+", "z-")
    found = contact(part, LoadCase(name="a", supports=supports), FlatPunch(), depth_mm=0.2)
    # E (1 - nu) / ((1 + nu) (1 - 2 nu)) A d / L (formula)
    assert found.force == pytest.approx(10 * 0.7 / (1.3 * 0.4) * 6.0 * 0.2 / 4.0, rel=1e-7)
    np.testing.assert_allclose(found.pressure, found.force / 6.0, rtol=1e-6)
    assert found.contact_area == pytest.approx(6.0)
    assert found.peak_pressure.value == pytest.approx(found.force / 6.0, rel=1e-6)
    push = Support(region=FaceRegion(name="top", side="z+"), displacement=(None, None, -0.2))
    linear = solve(part, LoadCase(name="b", supports=(*supports, push)), tol=1e-10)
    np.testing.assert_allclose(found.displacement, linear.displacement, atol=1e-8)
    static = static_result(found)
    np.testing.assert_allclose(static.stress, linear.stress, atol=1e-5)
    assert static.energy == pytest.approx(linear.energy, rel=1e-6)
    # all the work is the indenter's
    assert static.energy == pytest.approx(0.5 * found.force * 0.2, rel=1e-6)
    assert static.resultants == {"indenter 'indenter'": (0.0, 0.0, -found.force)}


def test_a_column_on_a_bed_that_grows_warm(grid, resin):
    part = Part.uniform(grid(3, 3, 4), resin(E=10.0, nu=0.3))
    supports = slides("x-", "x+", "y-", "y+")
    # k = p / d of the bed in series with the confined column (formula)
    bed = Foundation(region=FaceRegion(name="floor", side="z-"), stiffness=0.5)
    swell = InitialStrain(strain=(0.01, 0.01, 0.01, 0.0, 0.0, 0.0))
    case = LoadCase(name="a", supports=supports, loads=(bed, swell))
    found = contact(part, case, FlatPunch(), depth_mm=0.2)
    M = 10 * 0.7 / (1.3 * 0.4)
    # stress 0 in all directions at strain .01; held across, so it grows by (1 + nu)/(1 - nu) .01
    grows = 0.01 * 1.3 / 0.7 * 4.0
    assert found.force == pytest.approx(9 * (0.2 + grows) / (4.0 / M + 1 / 0.5), rel=1e-6)
    assert found.balance < 1e-6
    static = static_result(found)
    np.testing.assert_allclose(static.stress[..., 2], -found.force / 9.0, rtol=1e-5)


def two_phase(seed, resin, shape=(6, 5, 4)):
    rng = np.random.default_rng(seed)
    labels = rng.integers(1, 3, shape).astype(np.uint16)
    heights = rng.integers(2, shape[2] + 1, shape[:2])
    labels[np.arange(shape[2])[None, None] >= heights[..., None]] = 0
    resins = resin("stiff", 200.0, 0.35), resin("soft", 2.0, 0.48, kind="elastomer")
    palette = (EMPTY, Blend.pure("stiff"), Blend.pure("soft"))
    return Part(grid=VoxelGrid(shape=shape, spacing=(1.0, 1.0, 1.0)), resins=resins,
                palette=palette, labels=labels)  # fmt: skip


@settings(deadline=None, max_examples=15)
@given(st.integers(0, 10_000), st.sampled_from(["plane", "ball", "roller"]))
def test_complementary_and_in_balance_on_random_parts(resin, seed, kind):
    part = two_phase(seed, resin)
    indenter = {
        "plane": FlatPunch(position=(0.0, 0.0, 9.0)),
        "ball": SphereIndenter(position=(3.2, 2.4, 9.0), radius=4.0),
        "roller": CylinderIndenter(position=(2.9, 0.0, 9.0), radius=3.0, along="y"),
    }[kind]
    loads = (
        BodyForce(acceleration=(500.0, 0.0, -9806.65)),
        GroundSpring(region=FaceRegion(name="side", side="x-"), stiffness=(1.0, 0.0, 2.0)),
    )
    case = LoadCase(name="a", supports=(FLOOR,), loads=loads)
    found = contact(part, case, indenter, depth_mm=0.3, tol=1e-10)
    assert found.changes[-1] == 0
    assert np.all(found.nodal_force >= 0)
    assert np.all(found.gap >= -1e-6)
    finite = np.isfinite(found.gap)
    product = found.nodal_force[finite] * found.gap[finite]
    assert np.abs(product).max() <= 1e-6 * found.force
    assert found.balance < 1e-6
    pushed = np.array([0.0, 0.0, -found.force])
    total = np.sum([*found.reactions.values(), found.applied, pushed], axis=0)
    assert found.force > 0
    np.testing.assert_allclose(total, 0.0, atol=1e-6 * found.force)


@pytest.mark.parametrize("rough", [True, False])
def test_agrees_with_least_squares_on_the_dense_compliance(resin, grid, assembled, rough):
    # An independent twin: the contact problem on the inverse of the assembled matrix, as a
    # non-negative least-squares problem for the contact forces.
    import scipy.optimize

    from voxelmat.fea.assemble import moduli

    part = two_phase(5, resin, (5, 4, 4)) if rough else Part.uniform(grid(5, 4, 4), resin(nu=0.45))
    ball = SphereIndenter(position=(2.6, 2.1, 6.0), radius=5.0)
    found = contact(part, LoadCase(name="a", supports=(FLOOR,)), ball, depth_mm=0.4, tol=1e-11)
    assert rough or len(found.changes) > 1  # nodes are let go on the way
    lam, mu = moduli(part)
    K = assembled(lam, mu, part.grid.spacing, "icmb").toarray()
    node_shape = part.grid.node_shape[::-1]
    held = np.zeros((3, *node_shape), dtype=bool)
    held[:, 0] = True
    free = np.flatnonzero(~held.ravel() & (np.diag(K) > 0))
    number = (2 * np.prod(node_shape)) + np.ravel_multi_index(found.node.T[::-1], node_shape)
    surface = touch_surface(part, ball)
    can = np.isfinite(surface.gap)
    row = np.searchsorted(free, number[can])
    compliance = np.linalg.inv(K[np.ix_(free, free)])[np.ix_(row, row)]
    # min 1/2 p C p + (gap - depth) p over p >= 0, by the factor of C
    root = np.linalg.cholesky(compliance)
    p, _ = scipy.optimize.nnls(root.T, np.linalg.solve(root, 0.4 - surface.gap[can]))
    np.testing.assert_allclose(found.nodal_force[can], p, atol=1e-6 * p.max())


def test_symmetry_and_turned_grids(resin, grid):
    part = Part.uniform(grid(8, 8, 4), resin(E=3.0, nu=0.4))
    case = LoadCase(name="a", supports=(FLOOR,))
    found = contact(part, case, SphereIndenter(position=(4.0, 4.0, 5.0), radius=6.0), depth_mm=0.6)
    force = np.zeros(part.grid.node_shape[:2])
    force[tuple(found.node[:, :2].T)] = found.nodal_force
    assert np.count_nonzero(force) > 4
    for other in (force.T, force[::-1], force[:, ::-1]):
        np.testing.assert_allclose(force, other, atol=1e-6 * force.max())
    assert found.peak_pressure.place_mm == (4.0, 4.0, 4.0)
    assert found.touch == pytest.approx(1.0)
    lying = Part.uniform(grid(4, 8, 8), resin(E=3.0, nu=0.4))
    wall = Support(region=FaceRegion(name="wall", side="x+"))
    ball = SphereIndenter(position=(-2.0, 4.0, 4.0), radius=6.0, push="x+")
    turned = contact(lying, LoadCase(name="a", supports=(wall,)), ball, depth_mm=0.6)
    assert turned.force == pytest.approx(found.force, rel=1e-6)
    assert turned.touch == pytest.approx(2.0)


def test_force_control_inverts_displacement_control(resin, grid):
    part = Part.uniform(grid(8, 8, 5), resin(E=3.0, nu=0.4))
    case = LoadCase(name="a", supports=(FLOOR,))
    for tool in (SphereIndenter(position=(3.7, 4.2, 5.0), radius=8.0), FlatPunch(radius=20.0)):
        for depth in (0.03, 0.5):
            there = contact(part, case, tool, depth_mm=depth)
            back = contact(part, case, tool, force_N=there.force)
            assert back.depth == pytest.approx(depth, rel=1e-4)
            assert back.force == pytest.approx(there.force, rel=1e-5)


def test_curve(resin, grid):
    part = Part.uniform(grid(9, 9, 5), resin(E=3.0, nu=0.4))
    ball = SphereIndenter(position=(4.5, 4.5, 5.0), radius=8.0)
    depths = [0.05, 0.2, 0.4, 0.8]
    curve = press(part, (FLOOR,), ball, depths)
    np.testing.assert_array_equal(curve.depth, depths)
    assert np.all(np.diff(curve.force) > 0)
    assert np.all(np.diff(curve.secant) > 0)
    assert np.all(np.diff(curve.contact_area) >= 0)
    assert curve.last.depth == 0.8
    assert any("tenth of the part" in c for c in curve.last.cautions)
    # force is convex in depth and the tangent its slope
    step = 1e-4
    near = press(part, (FLOOR,), ball, [0.4, 0.4 + step])
    assert np.diff(near.force)[0] / step == pytest.approx(near.tangent[0], rel=1e-3)


def test_a_plate_as_a_mesh_is_a_rectangular_punch(resin, grid):
    part = Part.uniform(grid(6, 6, 4), resin(E=3.0, nu=0.4))
    corners = np.array([(x, y, 0.0) for x in (-1.0, 1.0) for y in (-1.5, 1.5)])
    mesh = TriangleMesh(vertices=corners, faces=np.array([(0, 1, 2), (1, 3, 2)], np.int32))
    case = LoadCase(name="a", supports=(FLOOR,))
    at = (3.0, 3.0, 7.0)
    plate = contact(part, case, MeshIndenter(mesh=mesh, position=at), depth_mm=0.1)
    punch = contact(part, case, FlatPunch(size=(2.0, 3.0), position=at), depth_mm=0.1)
    assert plate.force == pytest.approx(punch.force, rel=1e-9)
    assert plate.touch == punch.touch == pytest.approx(3.0)
    assert int(plate.touching.sum()) == 9


def test_crumbs_out_of_reach_do_not_matter(resin, grid):
    labels = np.ones((6, 4, 4), dtype=np.uint16)
    labels[4:] = 0
    labels[5, 2, 1] = 1  # hangs in the air, two voxels below the top
    palette = (EMPTY, Blend.pure("rigid-example"))
    part = Part(grid=grid(6, 4, 4), resins=(resin(),), palette=palette, labels=labels)
    case = LoadCase(name="a", supports=(FLOOR,))
    plane = FlatPunch(position=(0.0, 0.0, 4.0))
    found = contact(part, case, plane, depth_mm=0.1)
    assert any("loose pieces" in c for c in found.cautions)
    bare = part.replace(labels=np.where(np.arange(6)[:, None, None] < 4, labels, 0))
    assert found.force == pytest.approx(contact(bare, case, plane, depth_mm=0.1).force, rel=1e-7)
    with pytest.raises(InputError, match="is not held"):
        contact(part, case, plane, depth_mm=2.5)


def test_clear_errors(resin, grid, monkeypatch):
    part = Part.uniform(grid(4, 4, 3), resin())
    case = LoadCase(name="a", supports=(FLOOR,))
    for given_ in ({}, {"depth_mm": 1.0, "force_N": 1.0}):
        with pytest.raises(InputError, match="one of the two"):
            contact(part, case, FlatPunch(), **given_)
    for given_ in ({"depth_mm": -1.0}, {"force_N": 0.0}, {"depth_mm": float("nan")}):
        with pytest.raises(InputError, match="must be above 0"):
            contact(part, case, FlatPunch(), **given_)
    with pytest.raises(InputError, match="passes by every node"):
        contact(part, case, FlatPunch(radius=0.2, position=(2.5, 2.5, 9.0)), depth_mm=0.1)
    with pytest.raises(InputError, match="is not held"):
        contact(part, LoadCase(name="a", supports=slides("x-")), FlatPunch(), force_N=1.0)
    plate = Plate(name="lid", region=FaceRegion(name="lid", side="z+"))
    lid = LoadCase(name="a", supports=(FLOOR,), plates=(plate,))
    with pytest.raises(InputError, match="rigid plates"):
        contact(part, lid, FlatPunch(), depth_mm=0.1)
    with pytest.raises(InputError, match="must be above 0 mm and rise"):
        press(part, (FLOOR,), FlatPunch(), [0.2, 0.1])
    with pytest.raises(InputError, match="one or more depths"):
        press(part, (FLOOR,), FlatPunch(), [])

    def restless(self, active, push, gap, scale):
        return np.arange(len(active)) == 0, np.ones(len(active))

    monkeypatch.setattr(Pressed, "_judge", restless)
    monkeypatch.setattr("voxelmat.fea.active_set._CAREFUL", 8)
    monkeypatch.setattr("voxelmat.fea.active_set._ROUNDS", 4)
    with pytest.raises(ConvergenceError, match="do not settle") as caught:
        contact(part, case, FlatPunch(), depth_mm=0.1)
    assert len(caught.value.history) == 8


def test_cautions(resin, grid):
    part = Part.uniform(grid(6, 6, 4), resin())
    case = LoadCase(name="a", supports=(FLOOR,))
    small = contact(part, case, SphereIndenter(position=(3.0, 3.0, 4.0), radius=2.0), depth_mm=0.1)
    assert any("nodes touch" in c for c in small.cautions)
    steep = contact(part, case, SphereIndenter(position=(3.0, 3.0, 4.0), radius=1.05), depth_mm=2.0)
    assert any("slopes by up to" in c for c in steep.cautions)

"""From a part and a load case to a checked result."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.fea.assemble import moduli
from voxelmat.fea.static import solve
from voxelmat.fea.stress import max_principal, safety, safety_field
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.loadcase import BodyForce, Force, GroundSpring, LoadCase, Pressure, Support
from voxelmat.model.part import Part
from voxelmat.model.region import Box, FaceRegion

ROOT = Support(region=FaceRegion(name="root", side="x-"))
TIP = Force(region=FaceRegion(name="tip", side="x+"), vector=(0.0, 0.0, -2.0))


def bar(grid, resin, **changes):
    return Part.uniform(grid(8, 3, 3), resin(**changes))


def test_shapes_order_and_zero_in_empty_space(grid, resin):
    labels = np.ones((8, 3, 4), dtype=np.uint16)
    labels[4:, :, 3] = 0
    palette = (EMPTY, Blend.pure("rigid-example"))
    part = Part(grid=grid(8, 3, 4), resins=(resin(),), palette=palette, labels=labels)
    result = solve(part, LoadCase(name="a", supports=(ROOT,), loads=(TIP,)))
    assert result.displacement.shape == (9, 4, 5, 3)
    assert result.strain.shape == result.stress.shape == (8, 3, 4, 6)
    assert result.stress.dtype == result.strain.dtype == np.float32
    assert not result.stress[4:, :, 3].any()
    assert not result.displacement[5:, :, 4].any()
    assert not result.displacement[0].any()
    assert result.displacement[8, 1, 1, 2] < 0
    assert result.provenance.inputs["part"] == part.digest


@settings(deadline=None, max_examples=10)
@given(st.integers(0, 10_000))
def test_forces_balance_on_random_two_material_parts(grid, resin, seed):
    rng = np.random.default_rng(seed)
    labels = rng.integers(1, 3, (5, 4, 3)).astype(np.uint16)
    labels[3:, 2:, rng.integers(0, 3)] = 0
    stiff, soft = resin("stiff", 2000.0, 0.35), resin("soft", 2.0, 0.48, kind="elastomer")
    palette = (EMPTY, Blend.pure("stiff"), Blend.pure("soft"))
    part = Part(grid=grid(5, 4, 3), resins=(stiff, soft), palette=palette, labels=labels)
    spring = GroundSpring(region=FaceRegion(name="side", side="y-"), stiffness=(1.0, 2.0, 0.0))
    loads = (
        Force(region=FaceRegion(name="top", side="z+"), vector=tuple(rng.standard_normal(3))),
        Pressure(region=FaceRegion(name="end", side="x+"), pressure=0.1),
        BodyForce(acceleration=(0.0, 0.0, -9806.65)),
        spring,
    )
    case = LoadCase(name="a", supports=(ROOT,), loads=loads)
    result = solve(part, case, tol=1e-9)
    total = np.sum([*result.reactions.values(), result.applied], axis=0)
    np.testing.assert_allclose(total, 0.0, atol=1e-6 * np.linalg.norm(result.applied))
    assert result.balance < 1e-6
    assert set(result.reactions) == {"support 1 on 'root'", "load 4, spring on 'side'"}
    assert set(result.resultants) == {
        "load 1, force on 'top'",
        "load 2, pressure on 'end'",
        "load 3, body force on 'whole part'",
    }
    work = sum(
        np.linalg.norm(r) * result.load_displacement[n] for n, r in result.resultants.items()
    )
    moved = -np.asarray(result.reactions["load 4, spring on 'side'"])
    assert work >= 2 * result.energy  # the spring keeps the rest
    assert np.isfinite(moved).all()


def test_uniform_tension(grid, resin):
    # sigma = F / A, u = F L / (E A), lateral strain -nu sigma / E (formula)
    part = Part.uniform(grid(6, 3, 2, spacing=(1.0, 0.5, 0.8)), resin(E=100.0, nu=0.4))
    supports = tuple(
        Support(
            region=FaceRegion(name=f"{axis}0", side=f"{axis}-"),
            displacement=tuple(0.0 if a == axis else None for a in "xyz"),
        )
        for axis in "xyz"
    )
    pull = Force(region=FaceRegion(name="end", side="x+"), vector=(2.4, 0.0, 0.0))
    result = solve(part, LoadCase(name="pull", supports=supports, loads=(pull,)), tol=1e-11)
    np.testing.assert_allclose(result.stress[..., 0], 1.0, rtol=1e-5)
    np.testing.assert_allclose(result.stress[..., 1:], 0.0, atol=1e-5)
    np.testing.assert_allclose(result.von_mises, 1.0, rtol=1e-5)
    np.testing.assert_allclose(max_principal(result), 1.0, rtol=1e-5)
    np.testing.assert_allclose(result.strain[..., 2], -0.004, rtol=1e-4)
    assert result.load_displacement["load 1, force on 'end'"] == pytest.approx(0.06, rel=1e-8)
    assert result.largest_strain.value == pytest.approx(0.01, rel=1e-4)
    assert result.largest_rotation.value == pytest.approx(0.0, abs=1e-8)
    assert result.displacement_at((6.0 - 1e-9, 0.7, 0.7))[0] == pytest.approx(0.06, rel=1e-6)
    (judged,) = safety(result)
    assert judged.factor == pytest.approx(50.0, rel=1e-4)
    np.testing.assert_allclose(safety_field(result), 50.0, rtol=1e-4)
    assert judged.indicative


def test_prescribed_displacement_needs_no_force(grid, resin):
    part = bar(grid, resin, E=10.0, nu=0.0)
    push = Support(region=FaceRegion(name="end", side="x+"), displacement=(-0.4, None, None))
    result = solve(part, LoadCase(name="push", supports=(ROOT, push)))
    # E A u / L (formula)
    assert result.reactions["support 2 on 'end'"][0] == pytest.approx(-10 * 9 * 0.4 / 8, rel=1e-6)
    assert result.balance < 1e-6
    assert result.applied == (0.0, 0.0, 0.0)


def test_springs_alone_can_hold(grid, resin):
    part = bar(grid, resin)
    floor = GroundSpring(region=FaceRegion(name="floor", side="z-"), stiffness=(5.0, 5.0, 4.0))
    top = Force(region=FaceRegion(name="top", side="z+"), vector=(0.0, 0.0, -2.0))
    result = solve(part, LoadCase(name="float", loads=(floor, top)))
    # nearly rigid on its bed: F / k
    assert result.over(floor.region, "z", "mean") == pytest.approx(-0.5, rel=0.01)
    assert result.reactions["load 1, spring on 'floor'"][2] == pytest.approx(2.0, rel=1e-6)


def test_partly_filled_voxels_are_softer_and_stress_is_not_thinned(grid, resin):
    labels = np.ones((6, 3, 3), dtype=np.uint16)
    palette = (EMPTY, Blend.pure("rigid-example"))
    half = np.full(labels.shape, 51, dtype=np.uint8)  # a fifth of 255
    material = resin(E=100.0, nu=0.25)
    full = Part(grid=grid(6, 3, 3), resins=(material,), palette=palette, labels=labels)
    thin = full.replace(occupancy=half)
    np.testing.assert_allclose(moduli(thin)[1], 0.2 * moduli(full)[1])
    case = LoadCase(name="a", supports=(ROOT,), loads=(TIP,))
    a, b = solve(full, case, tol=1e-10), solve(thin, case, tol=1e-10)
    np.testing.assert_allclose(b.displacement, 5 * a.displacement, rtol=1e-5, atol=1e-9)
    np.testing.assert_allclose(b.stress, 5 * a.stress, rtol=1e-4, atol=1e-4)
    assert b.energy == pytest.approx(5 * a.energy, rel=1e-6)


def test_loose_specks_are_left_out_and_reported(grid, resin):
    labels = np.zeros((9, 4, 4), dtype=np.uint16)
    labels[:6] = 1
    labels[8, 3, 3] = 1
    palette = (EMPTY, Blend.pure("rigid-example"))
    part = Part(grid=grid(9, 4, 4), resins=(resin(),), palette=palette, labels=labels)
    push = Force(region=Box(name="end", low=(5.9, -1, -1), high=(6.1, 9, 9)), vector=(0, 0, 1))
    result = solve(part, LoadCase(name="a", supports=(ROOT,), loads=(push,)))
    assert any("1 loose pieces" in c for c in result.cautions)
    assert not result.displacement[8:].any()
    speck = Force(region=FaceRegion(name="tip", side="x+"), vector=(0, 0, 1))
    with pytest.raises(InputError, match="A loaded piece of the part is not held") as caught:
        solve(part, LoadCase(name="a", supports=(ROOT,), loads=(speck,)))
    assert "x 8 to 9, y 3 to 4, z 3 to 4 mm (1 voxels" in str(caught.value)


def test_an_unheld_part_names_its_motions(grid, resin):
    slide = Support(region=ROOT.region, displacement=(0.0, 0.0, None))
    with pytest.raises(InputError, match="The part is not held: translation along z"):
        solve(bar(grid, resin), LoadCase(name="a", supports=(slide,), loads=(TIP,)))


def test_cautions_about_size_record_and_film(grid, resin):
    labels = np.ones((4, 4, 5), dtype=np.uint16)
    labels[:, :, 2] = 2
    stiff, soft = resin("stiff", 2000.0, 0.35), resin("soft", 1.0, 0.49, kind="elastomer")
    palette = (EMPTY, Blend.pure("stiff"), Blend.pure("soft"))
    part = Part(grid=grid(4, 4, 5), resins=(stiff, soft), palette=palette, labels=labels)
    floor = Support(region=FaceRegion(name="floor", side="z-"))
    top = Force(region=FaceRegion(name="top", side="z+"), vector=(8.0, 0.0, 0.0))
    hot = LoadCase(
        name="a",
        supports=(floor,),
        loads=(top,),
        temperature_degC=60.0,
        duration_s=3600.0,
        cycles=9,
    )
    text = "\n".join(solve(part, hot).cautions)
    assert "The largest strain is" in text
    assert "only 1 or 2 voxels thick is bonded between stiff material at 16 places" in text
    assert "'soft' is used outside its record: 60 degC (record: 15 to 30)" in text
    assert "3600 s (record: up to 60; creep unknown), 9 cycles" in text
    calm = LoadCase(name="a", supports=(ROOT,), loads=(TIP,))
    assert solve(bar(grid, resin), calm).cautions == ()


def test_largest_rotation_of_a_twisted_strip(grid, resin):
    # prescribed rigid rotation of both ends by the same small angle about y: half the curl is it
    part = bar(grid, resin)
    angle = 1e-3
    supports = []
    for i in range(9):
        for k in range(4):
            line = Box(name=f"{i}{k}", low=(i - 0.1, -1, k - 0.1), high=(i + 0.1, 9, k + 0.1))
            supports.append(Support(region=line, displacement=(angle * k, 0.0, -angle * i)))
    result = solve(part, LoadCase(name="turn", supports=tuple(supports)))
    assert result.largest_rotation.value == pytest.approx(angle, rel=1e-9)
    assert result.largest_strain.value == pytest.approx(0.0, abs=1e-9)


def test_warm_start_from_a_result(grid, resin):
    part, case = bar(grid, resin), LoadCase(name="a", supports=(ROOT,), loads=(TIP,))
    first = solve(part, case, tol=1e-9)
    assert solve(part, case, tol=1e-8, warm=first).iterations == 0

"""Parts with orthotropic labels: exact fields, heat, beams, laminates, all kinds of loads."""

from dataclasses import replace

import numpy as np
import pytest

from voxelmat.errors import InputError
from voxelmat.fea.homogenise import homogenise
from voxelmat.fea.orthotropic_element import FORMS
from voxelmat.fea.orthotropic_static import solve_orthotropic
from voxelmat.fea.static import solve
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.loadcase import Force, Foundation, InitialStrain, LoadCase, Support, Temperature
from voxelmat.model.material import Constant
from voxelmat.model.orthotropic import Orthotropic
from voxelmat.model.part import Part
from voxelmat.model.plate import Plate
from voxelmat.model.region import Box, FaceRegion

ROOT = Support(region=FaceRegion(name="root", side="x-"))
# Invented, with three different moduli each way.
WOOD = Orthotropic(E=(1000.0, 80.0, 50.0), nu_xy=0.4, nu_xz=0.45, nu_yz=0.5, G=(70.0, 60.0, 8.0))


def block(grid, resin, *shape, spacing=(1.0, 1.0, 1.0), labels=None, count=1):
    made = np.ones(shape, dtype=np.uint16) if labels is None else labels
    names = [f"resin-{n}" for n in range(count)]
    return Part(
        grid=grid(*shape, spacing=spacing),
        resins=tuple(resin(name) for name in names),
        palette=(EMPTY, *(Blend.pure(name) for name in names)),
        labels=made,
    )


def test_pulled_block_has_its_modulus_and_ratios(grid, resin):
    # sigma = F / A; strains -nu_xy and -nu_xz times that along the pull (formula)
    part = block(grid, resin, 5, 3, 2, spacing=(1.0, 0.5, 0.8))
    held = tuple(
        Support(
            region=FaceRegion(name=side, side=side),
            displacement=tuple(0.0 if d == axis else None for d in range(3)),
        )
        for axis, side in enumerate(("x-", "y-", "z-"))
    )
    pull = Force(region=FaceRegion(name="end", side="x+"), vector=(2.4, 0.0, 0.0))
    case = LoadCase(name="pull", supports=held, loads=(pull,))
    result = solve_orthotropic(part, case, {1: WOOD}, tol=1e-12)
    strain = 2.4 / (1.5 * 1.6) / 1000.0
    expected = strain * np.array([1.0, -0.4, -0.45, 0, 0, 0])
    np.testing.assert_allclose(result.strain.reshape(-1, 6), np.tile(expected, (30, 1)), atol=1e-9)
    np.testing.assert_allclose(result.stress[..., 0], 1.0, rtol=1e-6)
    np.testing.assert_allclose(result.stress[..., 1:], 0.0, atol=1e-6)
    assert result.energy == pytest.approx(0.5 * strain * 5 * 2.4, rel=1e-9)
    assert any("indicative" in c for c in result.cautions)


def test_initial_strain_of_a_free_block_leaves_no_stress(grid, resin):
    part = block(grid, resin, 3, 3, 2)
    held = tuple(
        Support(
            region=FaceRegion(name=side, side=side),
            displacement=tuple(0.0 if d == axis else None for d in range(3)),
        )
        for axis, side in enumerate(("x-", "y-", "z-"))
    )
    own = np.array([1e-3, -2e-3, 3e-3, 0.0, 0.0, 0.0])
    case = LoadCase(name="a", supports=held, loads=(InitialStrain(strain=own),))
    result = solve_orthotropic(part, case, {1: WOOD}, tol=1e-12)
    np.testing.assert_allclose(result.strain.reshape(-1, 6), np.tile(own, (18, 1)), atol=1e-9)
    np.testing.assert_allclose(result.stress, 0.0, atol=1e-6)
    assert abs(result.energy) < 1e-12


def test_isotropic_labels_give_the_isotropic_result(grid, resin):
    rng = np.random.default_rng(3)
    labels = rng.integers(1, 3, (6, 4, 3)).astype(np.uint16)
    labels[2:, 2:, 1] = 0
    part = block(grid, resin, 6, 4, 3, labels=labels, count=2)
    part = part.replace(occupancy=np.where(labels > 0, rng.integers(60, 256, labels.shape), 0))
    load = Force(region=FaceRegion(name="tip", side="x+"), vector=(0.3, 0.0, -2.0))
    case = LoadCase(name="a", supports=(ROOT,), loads=(load,))
    same = Orthotropic.isotropic(2000.0, 0.3)
    result = solve_orthotropic(part, case, {1: same, 2: same}, tol=1e-11)
    expected = solve(part, case, tol=1e-11)
    size = np.abs(expected.displacement).max()
    np.testing.assert_allclose(result.displacement, expected.displacement, atol=1e-9 * size)
    np.testing.assert_allclose(result.stress, expected.stress, atol=1e-5 * expected.stress.max())
    assert result.energy == pytest.approx(expected.energy, rel=1e-9)
    assert result.balance < 1e-8


@pytest.mark.parametrize("element", FORMS)
def test_free_strain_of_isotropic_labels_is_that_of_the_isotropic_solver(grid, resin, element):
    rng = np.random.default_rng(9)
    part = block(grid, resin, 4, 3, 2, spacing=(1.0, 0.7, 1.2))
    warm = part.resins[0].replace(expansion=Constant(value=8e-5, unit="1/K"))
    part = part.replace(
        resins=(warm,), occupancy=rng.integers(60, 256, part.grid.shape).astype(np.uint8)
    )
    hot = Temperature(temperature=rng.uniform(20, 60, (5, 4, 3)), stress_free=20.0)
    own = InitialStrain(strain=rng.uniform(-1e-3, 1e-3, 6))
    case = LoadCase(name="a", supports=(ROOT,), loads=(hot, own))
    same = Orthotropic.isotropic(2000.0, 0.3)
    result = solve_orthotropic(part, case, {1: same}, element=element, tol=1e-11)
    expected = solve(part, case, element=element, tol=1e-11)
    size = np.abs(expected.displacement).max()
    np.testing.assert_allclose(result.displacement, expected.displacement, atol=1e-8 * size)
    largest = np.abs(expected.stress).max()
    np.testing.assert_allclose(result.stress, expected.stress, atol=1e-5 * largest)
    np.testing.assert_allclose(
        result.energy_density, expected.energy_density, atol=1e-5 * expected.energy_density.max()
    )
    assert result.energy == pytest.approx(expected.energy, rel=1e-8)


def test_orthotropic_plate_bends_freely_with_a_temperature_through_it(grid, resin):
    """Linear in z: curvature alpha dT / t and no stress, whatever the stiffness (formula)."""
    part = block(grid, resin, 6, 4, 1, spacing=(1.0, 1.0, 0.5))
    warm = part.resins[0].replace(expansion=Constant(value=8e-5, unit="1/K"))
    part = part.replace(resins=(warm,))
    field = np.zeros((7, 5, 2)) + np.array([-10.0, 10.0])
    hot = Temperature(temperature=field, stress_free=0.0)
    corner = [
        Support(region=Box(name=f"c{n}", low=low, high=high), displacement=held)
        for n, (low, high, held) in enumerate((
            ((-0.1, -0.1, -0.1), (0.1, 0.1, 0.1), (0.0, 0.0, 0.0)),
            ((5.9, -0.1, -0.1), (6.1, 0.1, 0.1), (None, 0.0, 0.0)),
            ((-0.1, 3.9, -0.1), (0.1, 4.1, 0.1), (None, None, 0.0)),
        ))
    ]  # fmt: skip
    case = LoadCase(name="a", supports=tuple(corner), loads=(hot,))
    result = solve_orthotropic(part, case, {1: WOOD}, tol=1e-11)
    curvature = 8e-5 * 20.0 / 0.5
    w = result.displacement[:, 0, 0, 2]
    x = np.arange(7.0)
    # Hotter above: it bends away from the heat, between its two held ends.
    np.testing.assert_allclose(w, 0.5 * curvature * x * (6.0 - x), atol=1e-8)
    assert abs(result.energy) < 1e-9 * curvature**2 * 1000.0
    assert any("expand with heat" in c for c in result.cautions)


@pytest.mark.parametrize(
    ("layers", "factor", "near"), [(1, 1.0, 1e-3), (2, 1.0, 1e-3), (8, 5 / 6, 1e-2)]
)
def test_cantilever_bends_as_timoshenko_with_its_own_shear_modulus(
    grid, resin, layers, factor, near
):
    # w = F L^3 / (3 E_x I) + F L / (k G_xz A) (Timoshenko 1921, from memory). The shear stress is
    # constant over each layer of voxels: with one or two layers k is 1, with many it nears 5/6.
    # The held root cannot warp, as Timoshenko's beam does: 8 layers measure 0.6 % under it.
    length, depth, width = 40, 4.0, 4.0
    fibre = Orthotropic(
        E=(2000.0, 50.0, 50.0), nu_xy=0.3, nu_xz=0.3, nu_yz=0.3, G=(20.0, 20.0, 15.0)
    )
    h = (1.0, width / min(layers, 2), depth / layers)
    part = block(grid, resin, length, min(layers, 2), layers, spacing=h)
    load = Force(region=FaceRegion(name="tip", side="x+"), vector=(0.0, 0.0, -0.05))
    case = LoadCase(name="bend", supports=(ROOT,), loads=(load,))
    result = solve_orthotropic(part, case, {1: fibre})
    moment = width * depth**3 / 12
    bending = 0.05 * length**3 / (3 * 2000.0 * moment)
    shear = 0.05 * length / (factor * 20.0 * width * depth)
    assert shear > 0.2 * bending  # or the test would not see G
    found = result.load_displacement["load 1, force on 'tip'"]
    assert found == pytest.approx(bending + shear, rel=near)


def test_homogenised_laminate_stands_for_its_layers(grid, resin):
    """C1's laminate (Backus 1962) as one block deflects as the resolved layers do."""
    soft, stiff = resin("soft", E=1.0, nu=0.45), resin("stiff", E=100.0, nu=0.3)
    palette = (EMPTY, Blend.pure("soft"), Blend.pure("stiff"))
    cell = Part(
        grid=grid(1, 1, 2),
        resins=(soft, stiff),
        palette=palette,
        labels=np.array([[[1, 2]]], dtype=np.uint16),
    )
    effective = homogenise(cell, tol=1e-11)
    made = Orthotropic.from_effective(effective)
    # Backus 1962, order C11 C22 C33 C12 C13 C23 C44 C55 C66
    backus = [58.43921215, 58.43921215, 7.37830586, 19.63284611, 4.59946340, 4.59946340,
              0.68352700, 0.68352700, 19.40318302]  # fmt: skip
    np.testing.assert_allclose(made.constants, backus, rtol=1e-8)
    assert made.off_axis < 1e-8
    assert made.E[2] == pytest.approx(6.836369, rel=1e-6)

    labels = np.ones((8, 8, 16), dtype=np.uint16)
    labels[:, :, 1::2] = 2
    layers = Part(grid=grid(8, 8, 16), resins=(soft, stiff), palette=palette, labels=labels)
    one = layers.replace(labels=np.ones((8, 8, 16), dtype=np.uint16))
    base = Support(region=FaceRegion(name="base", side="z-"))
    for vector in ((0.0, 0.0, -4.0), (1.0, 0.0, 0.0)):
        load = Force(region=FaceRegion(name="top", side="z+"), vector=vector)
        case = LoadCase(name="press", supports=(base,), loads=(load,))
        resolved = solve(layers, case).load_displacement["load 1, force on 'top'"]
        alike = solve_orthotropic(one, case, {1: made})
        found = alike.load_displacement["load 1, force on 'top'"]
        # 16 layers: measured 0.2 % pressed and 0.5 % sheared, less with finer layers
        assert found == pytest.approx(resolved, rel=0.01)


def test_plates_foundations_and_loose_pieces_work_with_orthotropic_labels(grid, resin):
    labels = np.ones((6, 4, 5), dtype=np.uint16)
    labels[:, :, 3] = 0  # the layer above hangs in the air
    labels[0, :, 4] = 0
    part = block(grid, resin, 6, 4, 5, labels=labels)
    top = FaceRegion(name="top", side="z+")
    bottom = FaceRegion(name="bottom", side="z-")
    bed = Foundation(region=bottom, stiffness=5.0, acts="all")
    pressed = Box(name="end", low=(5.0, -1.0, -1.0), high=(7.0, 5.0, 3.0))
    plate = Plate(name="cap", region=pressed, point=(6.0, 2.0, 1.5), force=(0.0, 0.0, -3.0))
    case = LoadCase(name="a", supports=(ROOT,), loads=(bed,), plates=(plate,))
    result = solve_orthotropic(part, case, {1: WOOD}, tol=1e-9)
    assert result.balance < 1e-6
    assert result.moment_balance < 1e-6
    assert result.displacement[6, 2, 2, 2] < 0
    assert not result.displacement[:, :, 4:].any()
    assert any("loose" in c or "not held" in c or "pieces" in c for c in result.cautions)
    hanging = Force(region=top, vector=(0.0, 0.0, -1.0))
    with pytest.raises(InputError):
        solve_orthotropic(part, replace(case, loads=(hanging,), plates=()), {1: WOOD})


def test_a_label_that_does_not_exist_is_refused(grid, resin):
    part = block(grid, resin, 2, 2, 2)
    pull = Force(region=FaceRegion(name="t", side="x+"), vector=(1.0, 0.0, 0.0))
    case = LoadCase(name="a", supports=(ROOT,), loads=(pull,))
    for label in (0, 2):
        with pytest.raises(InputError, match="palette of part 'part' has labels 1 to 1"):
            solve_orthotropic(part, case, {label: WOOD})

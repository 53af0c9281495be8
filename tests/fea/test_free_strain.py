"""Thermal and initial strain: free, clamped, in parallel, in a bimetal, and in every element."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.fea.free_strain import FreeStrain
from voxelmat.fea.heat import conduct
from voxelmat.fea.sensitivity import stiffness_forms
from voxelmat.fea.static import solve
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.heatcase import FixedTemperature, HeatCase
from voxelmat.model.loadcase import Force, InitialStrain, LoadCase, Plate, Support, Temperature
from voxelmat.model.material import Constant
from voxelmat.model.part import Part
from voxelmat.model.region import Box, FaceRegion
from voxelmat.model.symmetry import symmetry_support

ELEMENTS = ["icmb", "full", "bbar", "icm"]
SIX = tuple(symmetry_support(axis + side) for axis in "xyz" for side in "-+")


def point(name, x, y, z, held, e=1e-3):
    box = Box(name=name, low=(x - e, y - e, z - e), high=(x + e, y + e, z + e))
    return Support(region=box, displacement=held)


def three_points(length, width):
    """Holds the six rigid motions and nothing else."""
    return (
        point("o", 0, 0, 0, (0, 0, 0)),
        point("x", length, 0, 0, (None, 0, 0)),
        point("y", 0, width, 0, (None, None, 0)),
    )


def expanding(resin, name="a", E=2000.0, nu=0.3, alpha=1e-4):
    return resin(name, E, nu).replace(expansion=Constant(value=alpha, unit="1/K"))


def warm(*supports, temperature=73.0, stress_free=23.0, loads=()):
    heat = Temperature(temperature=temperature, stress_free=stress_free)
    return LoadCase(name="warm", supports=supports, loads=(heat, *loads))


# Check D2: free expansion of one material: stress zero to 1e-12 (here of E); strain a dT.
@pytest.mark.parametrize("element", ELEMENTS)
def test_free_expansion(grid, resin, element):
    part = Part.uniform(grid(4, 2, 3, spacing=(1.0, 0.5, 2.0)), expanding(resin))
    result = solve(part, warm(*three_points(4.0, 1.0)), element=element, tol=1e-13)
    assert np.abs(result.stress).max() < 1e-12 * 2000.0
    place = np.stack(np.meshgrid(*part.grid.nodes(), indexing="ij"), axis=-1)
    np.testing.assert_allclose(result.displacement, 5e-3 * place, atol=1e-12)
    assert abs(result.energy) < 1e-12
    np.testing.assert_allclose(result.free_strain[..., :3], 5e-3, rtol=1e-6)
    assert not any("miss each other" in c for c in result.cautions)


# Check D3: clamped block: stress -E a dT / (1 - 2 nu) (formula); energy by the same.
@pytest.mark.parametrize("element", ELEMENTS)
def test_clamped_block(grid, resin, element):
    part = Part.uniform(grid(3, 2, 2), expanding(resin))
    result = solve(part, warm(*SIX), element=element)
    s = -2000.0 * 5e-3 / 0.4
    np.testing.assert_allclose(result.stress[..., :3], s, rtol=1e-6)
    assert result.energy == pytest.approx(0.5 * 3 * 12 * -s * 5e-3, rel=1e-12)
    assert result.reactions["support 2 on 'symmetry plane x+'"][0] == pytest.approx(4 * s, rel=1e-9)


# Check D4: bars of nu 0 bonded side by side, ends held: force sum(E A a dT) (formula).
def test_bars_in_parallel(grid, resin):
    labels = np.ones((6, 3, 1), dtype=np.uint16)
    labels[:, 1:] = 2
    resins = expanding(resin, "a", 1.0, 0.0, 2e-4), expanding(resin, "b", 10.0, 0.0, 1e-4)
    palette = (EMPTY, Blend.pure("a"), Blend.pure("b"))
    part = Part(grid=grid(6, 3, 1), resins=resins, palette=palette, labels=labels)
    ends = symmetry_support("x-"), symmetry_support("x+")
    rest = symmetry_support("y-"), symmetry_support("z-")
    held = solve(part, warm(*ends, *rest, temperature=33.0), tol=1e-12)
    force = 1.0 * 1 * 2e-3 + 10.0 * 2 * 1e-3
    assert held.reactions["support 1 on 'symmetry plane x-'"][0] == pytest.approx(force, rel=1e-9)
    # long, free at one end but for a plate: mean strain sum(E A a dT) / sum(E A); the plate also
    # keeps the end from widening, which at nu 0 reaches no farther than the end
    plate = Plate(name="end", region=FaceRegion(name="end", side="x+"),
                  translation=(None, 0, 0), rotation=(0, 0, 0))  # fmt: skip
    case = LoadCase(name="c", supports=(ends[0], *rest), plates=(plate,),
                    loads=(Temperature(temperature=33.0),))  # fmt: skip
    long = part.replace(grid=grid(6, 3, 1, spacing=(50.0, 1.0, 1.0)))
    found = solve(long, case, tol=1e-10)
    assert found.plates["end"].translation[0] == pytest.approx(300.0 * force / 21.0, rel=2e-3)


# Check D1: bimetal strip 10 x 1, two equal layers, da dT 1e-3: curvature 1.5e-3 (moduli equal),
# 9.95851e-4 (ratio 10) (Timoshenko 1925, JOSA 11:233), fitted over [2h, L - 2h]; incompatible
# modes at 2 voxels through the thickness: ratio 1.0000.
@pytest.mark.parametrize("element", ["icmb", "icm"])
@pytest.mark.parametrize(("ratio", "curvature"), [(1.0, 1.5e-3), (10.0, 9.95851e-4)])
def test_bimetal(grid, resin, element, ratio, curvature):
    labels = np.ones((20, 1, 2), dtype=np.uint16)
    labels[:, :, 1] = 2
    resins = expanding(resin, "a", 1.0, 0.0, 2e-5), expanding(resin, "b", ratio, 0.0, 1e-5)
    palette = (EMPTY, Blend.pure("a"), Blend.pure("b"))
    g = grid(20, 1, 2, spacing=(0.5, 0.5, 0.5))
    part = Part(grid=g, resins=resins, palette=palette, labels=labels)
    case = warm(symmetry_support("x-"), symmetry_support("y-"), point("o", 0, 0, 0, (0, 0, 0)),
                temperature=123.0)  # fmt: skip
    result = solve(part, case, element=element, tol=1e-11)
    x = g.nodes()[0]
    inside = (x >= 2) & (x <= 8)
    fit = np.polyfit(x[inside], result.displacement[inside, 0, 0, 2], 2)
    assert abs(2 * fit[0]) / curvature == pytest.approx(1.0, abs=5e-5)


def test_linear_temperature_bends_one_voxel_freely(grid, resin):
    """T = 10 z at the nodes: no stress, w = -a 10 (x^2 + y^2) / 2 (formula), at one voxel."""
    part = Part.uniform(grid(5, 2, 1), expanding(resin))
    x, y, z = np.meshgrid(*part.grid.nodes(), indexing="ij")
    result = solve(part, warm(*three_points(5.0, 2.0), temperature=23.0 + 10.0 * z), tol=1e-13)
    assert np.abs(result.stress).max() < 1e-9
    assert abs(result.energy) < 1e-12
    curved = -0.5e-3 * (x**2 + y**2)
    w = result.displacement[..., 2]
    # less the tilt that brings the three points back to 0
    tilt = -(curved[5, 0, 0] / 5 * x + curved[0, 2, 0] / 2 * y)
    np.testing.assert_allclose(w[:, :, 0], (curved + tilt)[:, :, 0], atol=1e-10)
    # voxel values alone know nothing of the slope within a voxel
    flat = solve(part, warm(*three_points(5.0, 2.0), temperature=28.0 + 0 * part.labels), tol=1e-12)
    assert np.abs(flat.displacement[:, :, 0, 2]).max() < 1e-9


@settings(deadline=None, max_examples=12)
@given(seed=st.integers(0, 99), element=st.sampled_from(ELEMENTS))
def test_forces_and_energy_of_one_field(seed, element):
    """The energy is that of K at a field that strains as the free strain does, twice over."""
    rng = np.random.default_rng(seed)
    shape, h = (2, 3, 2), (0.7, 1.1, 0.9)
    lam, mu = rng.uniform(0.5, 5.0, (2, *shape))
    u = rng.normal(size=(3, *(n + 1 for n in shape)))
    free = FreeStrain(mean=rng.normal(size=(6, *shape)), slope=rng.normal(size=(3, *shape)))

    def energy(v, f):
        dlam, dmu = stiffness_forms(v, v, lam, mu, h, element)
        return float((0.5 * (lam * dlam + mu * dmu) + f.energy(v, lam, mu, h, element)).sum())

    # It is quadratic and never negative, and its slope at u = 0 is minus the nodal forces.
    assert energy(u, free) > 0
    step = energy(u, free) - energy(-u, free)
    forces = free.forces(lam, mu, h, element)
    assert 0.5 * step == pytest.approx(-float((forces * u).sum()), rel=1e-9)
    assert np.abs(forces.sum(axis=(1, 2, 3))).max() < 1e-12


@pytest.mark.parametrize("element", ELEMENTS)
def test_strain_of_an_affine_field_is_free(element):
    """Free strain equal to that of u: energy 0 and forces K u, in a random material."""
    rng = np.random.default_rng(5)
    shape, h = (2, 2, 3), (0.7, 1.1, 0.9)
    lam, mu = rng.uniform(0.5, 5.0, (2, *shape))
    axes = [s * np.arange(n + 1) for n, s in zip(shape, h[::-1], strict=True)]
    z, y, x = np.meshgrid(*axes, indexing="ij")
    H = rng.normal(size=(3, 3))
    u = np.einsum("ab,bkji->akji", H, np.stack([x, y, z]))
    e = [H[0, 0], H[1, 1], H[2, 2], H[0, 1] + H[1, 0], H[0, 2] + H[2, 0], H[1, 2] + H[2, 1]]
    free = FreeStrain(mean=np.broadcast_to(np.reshape(e, (6, 1, 1, 1)), (6, *shape)).copy())
    dlam, dmu = stiffness_forms(u, u, lam, mu, h, element)
    half = 0.5 * (lam * dlam + mu * dmu)
    np.testing.assert_allclose(half + free.energy(u, lam, mu, h, element), 0.0, atol=1e-12)
    work = float((free.forces(lam, mu, h, element) * u).sum())
    assert work == pytest.approx(2 * half.sum(), rel=1e-12)


def test_initial_strain_and_superposition(grid, resin):
    """A programmed strain acts as the same thermal one; loads and strains add up."""
    part = Part.uniform(grid(4, 2, 2), expanding(resin))
    foot = Support(region=FaceRegion(name="foot", side="x-"))
    pull = Force(region=FaceRegion(name="end", side="x+"), vector=(1.0, 2.0, -3.0))
    by_heat = solve(part, warm(foot), tol=1e-12)
    strain = InitialStrain(strain=(5e-3, 5e-3, 5e-3, 0, 0, 0))
    by_strain = solve(part, LoadCase(name="c", supports=(foot,), loads=(strain,)), tol=1e-12)
    np.testing.assert_allclose(by_strain.displacement, by_heat.displacement, atol=1e-13)
    np.testing.assert_allclose(by_strain.stress, by_heat.stress, atol=1e-4)
    pulled = solve(part, LoadCase(name="p", supports=(foot,), loads=(pull,)), tol=1e-12)
    both = solve(part, warm(foot, loads=(pull,)), tol=1e-12)
    expected = by_heat.displacement + pulled.displacement
    np.testing.assert_allclose(both.displacement, expected, atol=1e-11)
    np.testing.assert_allclose(both.reactions["support 1 on 'foot'"], (-1, -2, 3), rtol=1e-7)


def test_twisting_programme(grid, resin):
    """Equal shear in every voxel of a free block shears it without stress."""
    part = Part.uniform(grid(3, 2, 2), resin())
    field = np.zeros((3, 2, 2, 6))
    field[..., 3] = 0.01
    case = LoadCase(name="c", supports=three_points(3.0, 2.0),
                    loads=(InitialStrain(strain=field),))  # fmt: skip
    result = solve(part, case, tol=1e-13)
    assert np.abs(result.stress).max() < 1e-9
    np.testing.assert_allclose(result.strain[..., 3], 0.01, rtol=1e-5)


def test_partly_filled_voxels_expand_alike(grid, resin):
    part = Part.uniform(grid(3, 3, 2), expanding(resin))
    fill = np.random.default_rng(3).integers(60, 256, size=(3, 3, 2)).astype(np.uint8)
    result = solve(part.replace(occupancy=fill), warm(*three_points(3.0, 3.0)), tol=1e-13)
    assert np.abs(result.stress).max() < 1e-9


def test_only_a_region_expands(grid, resin):
    part = Part.uniform(grid(4, 1, 1), expanding(resin, nu=0.0))
    half = Box(name="half", low=(-1, -1, -1), high=(2.0, 2, 2))
    heat = Temperature(temperature=73.0, region=half)
    case = LoadCase(name="c", supports=(symmetry_support("x-"), symmetry_support("x+"),
                    symmetry_support("y-"), symmetry_support("z-")), loads=(heat,))  # fmt: skip
    result = solve(part, case, tol=1e-12)
    # two halves in series, one of which expands: -E a dT / 2 on the mean (formula)
    mean = result.reactions["support 2 on 'symmetry plane x+'"][0]
    assert mean == pytest.approx(-2000 * 5e-3 / 2, rel=1e-9)


# Levin 1967: a* = a1 + (a2 - a1) (1/K* - 1/K1) / (1/K2 - 1/K1) with the law's own K*; a clamped
# block of the blend then has stress -3 K* a* dT (formula).
def test_clamped_blend(grid, resin):
    one, two = expanding(resin, "one", 1.0, 0.45, 1e-4), expanding(resin, "two", 10.0, 0.3, 2e-5)
    part = Part(grid=grid(2, 2, 2), resins=(one, two), labels=np.ones((2, 2, 2), dtype=np.uint16),
                palette=(EMPTY, Blend.of({"one": 2, "two": 1})))  # fmt: skip
    K = part.palette_moduli()[0][1]
    share = (1 / K - 1 / one.bulk) / (1 / two.bulk - 1 / one.bulk)
    alpha = 1e-4 + (2e-5 - 1e-4) * share
    result = solve(part, warm(*SIX))
    np.testing.assert_allclose(result.stress[..., :3], -3 * K * alpha * 50.0, rtol=1e-6)
    assert 2e-5 < alpha < 1e-4


def test_from_heat_conduction_to_warp(grid, resin):
    """A plate warm below and cold above bends to curvature a (T1 - T2) / h without stress."""
    metal = expanding(resin).replace(
        conductivity=Constant(value=0.2), temperature_range_degC=(15.0, 60.0)
    )
    part = Part.uniform(grid(6, 2, 2), metal)
    faces = (("z-", 63.0), ("z+", 23.0))
    fixed = tuple(
        FixedTemperature(region=FaceRegion(name=s, side=s), temperature_degC=t) for s, t in faces
    )
    heat = conduct(part, HeatCase(name="h", fixed=fixed))
    result = solve(part, warm(*three_points(6.0, 2.0), temperature=heat.temperature), tol=1e-12)
    assert np.abs(result.stress).max() < 1e-5
    w = result.displacement[:, 0, 0, 2]
    assert 2 * np.polyfit(part.grid.nodes()[0], w, 2)[0] == pytest.approx(1e-4 * 40 / 2, rel=1e-6)
    assert any("23 to 63 degC (record: 15 to 60)" in c for c in result.cautions)


def test_errors(grid, resin):
    part = Part.uniform(grid(2, 2, 2), resin())
    with pytest.raises(InputError, match=r"no thermal expansion for 'rigid-example'.*um_per_m_K"):
        solve(part, warm(*SIX))
    part = Part.uniform(grid(2, 2, 2), expanding(resin))
    with pytest.raises(InputError, match=r"shape \(4, 4, 4\)"):
        solve(part, warm(*SIX, temperature=np.zeros((4, 4, 4))))
    gap = np.full((2, 2, 2), 30.0)
    gap[1, 0, 1] = np.nan
    with pytest.raises(InputError, match=r"1 voxels of the part have no temperature.*\(1, 0, 1\)"):
        solve(part, warm(*SIX, temperature=gap))
    with pytest.raises(InputError, match="not held"):
        solve(part, warm(symmetry_support("x-")))
    with pytest.raises(InputError, match="six components"):
        InitialStrain(strain=(1.0, 2.0))
    with pytest.raises(InputError, match="must be finite"):
        Temperature(temperature=float("nan"))

"""Thermal constants of materials and blends, and what heat cases refuse."""

import numpy as np
import pytest

from voxelmat.errors import InputError
from voxelmat.io.materials import load_library
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.heatcase import Convection, FixedTemperature, HeatCase, HeatFlux, HeatSource
from voxelmat.model.material import Constant, Material
from voxelmat.model.part import Part
from voxelmat.model.region import FaceRegion
from voxelmat.model.thermal import mixed_conductivity, palette_capacity, palette_conductivity

TOP = FaceRegion(name="top", side="z+")


def resin(name, k=0.2, c=1500.0, density=1.2e-9):
    """An invented resin."""
    return Material(
        name=name,
        kind="rigid",
        E=Constant(value=1000.0),
        nu=Constant(value=0.3),
        density=Constant(value=density),
        conductivity=None if k is None else Constant(value=k, unit="W/(m K)"),
        heat_capacity=None if c is None else Constant(value=c, unit="J/(kg K)"),
    )


def blended(*resins, fractions):
    palette = (EMPTY, Blend.of(dict(zip([m.name for m in resins], fractions, strict=True))))
    labels = np.ones((1, 1, 1), dtype=np.uint16)
    return Part(
        grid=VoxelGrid(shape=(1, 1, 1), spacing=(1, 1, 1)),
        resins=resins,
        palette=palette,
        labels=labels,
    )


def test_units():
    # 0.2 W/(m K) = 0.2 mW/(mm K); 1500 J/(kg K) * 1.2 g/cm^3 = 1.8 J/(cm^3 K) = 1.8 mJ/(mm^3 K).
    part = blended(resin("a"), fractions=(1,))
    np.testing.assert_allclose(palette_conductivity(part), [0, 0.2])
    np.testing.assert_allclose(palette_capacity(part), [0, 1.8])


def test_capacity_is_that_of_the_masses():
    a, b = resin("a", c=1000.0, density=1e-9), resin("b", c=500.0, density=8e-9)
    part = blended(a, b, fractions=(0.75, 0.25))
    # 0.75 * 1 + 0.25 * 4 mJ/(mm^3 K) (additive, formula)
    np.testing.assert_allclose(palette_capacity(part)[1], 1.75)


def test_two_phases_solve_the_quadratic_of_the_effective_medium():
    # w1 (k1-k)/(k1+2k) + w2 (k2-k)/(k2+2k) = 0 gives k = (b + sqrt(b^2 + 8 k1 k2)) / 4 with
    # b = (3 w1 - 1) k1 + (3 w2 - 1) k2 (formula).
    w = np.linspace(0, 1, 11)
    k1, k2 = 0.2, 50.0
    b = (3 * w - 1) * k1 + (3 * (1 - w) - 1) * k2
    expected = (b + np.sqrt(b**2 + 8 * k1 * k2)) / 4
    found = mixed_conductivity(np.column_stack([w, 1 - w]), np.array([k1, k2]))
    np.testing.assert_allclose(found, expected, rtol=1e-12)
    np.testing.assert_allclose(found[[0, -1]], [k2, k1], rtol=1e-14)


def test_blends_stay_within_the_bounds_of_hashin_and_shtrikman():
    # Z. Hashin & S. Shtrikman, J. Appl. Phys. 33 (1962) 3125: 1 / sum w/(k + 2 k_ext) - 2 k_ext.
    rng = np.random.default_rng(0)
    k = np.array([0.1, 0.3, 20.0])
    w = rng.dirichlet(np.ones(3), 200)
    low, high = (1 / (w @ (1 / (k + 2 * e))) - 2 * e for e in (k.min(), k.max()))
    found = mixed_conductivity(w, k)
    assert np.all(found >= low * (1 - 1e-12))
    assert np.all(found <= high * (1 + 1e-12))


def test_a_missing_constant_is_named():
    part = blended(resin("a"), resin("bare", k=None, c=None), fractions=(0.5, 0.5))
    with pytest.raises(InputError, match=r"no conductivity for 'bare'.*conductivity_W_per_m_K"):
        palette_conductivity(part)
    with pytest.raises(InputError, match=r"no heat capacity for 'bare'.*J_per_kg_K"):
        palette_capacity(part)
    # One that the part does not hold is not missed.
    only = part.replace(palette=(EMPTY, Blend.pure("a")))
    np.testing.assert_allclose(palette_conductivity(only), [0, 0.2])


def test_a_mixed_up_unit_is_refused():
    with pytest.raises(InputError, match=r"heat capacity.*J/\(kg K\)"):
        resin("a", c=1.5e9)  # mJ/(tonne K)
    with pytest.raises(InputError, match="conductivity"):
        resin("a", k=-0.2)


def test_the_library_states_them_with_a_range():
    for material in load_library().values():
        for constant in (material.conductivity, material.heat_capacity):
            assert constant.band[0] < constant.value < constant.band[1]
            assert constant.indicative
    steel = load_library()["steel"]
    assert (steel.conductivity.value, steel.heat_capacity.value) == (50.0, 460.0)


@pytest.mark.parametrize(
    ("make", "what"),
    [
        (lambda: FixedTemperature(region=TOP, temperature_degC=-300.0), "-273.15"),
        (lambda: Convection(film_W_per_m2_K=0.0, ambient_degC=20.0), "film coefficient"),
        (lambda: Convection(film_W_per_m2_K=5.0, ambient_degC=np.nan), "surroundings"),
        (lambda: HeatFlux(flux_mW_per_mm2=np.inf), "flux"),
        (lambda: HeatSource(), "one finite value"),
        (lambda: HeatSource(total_mW=1.0, density_mW_per_mm3=1.0), "one finite value"),
        (lambda: HeatCase(name="a", initial_degC=np.inf), "initial"),
        (lambda: HeatCase(name="a", flux=(HeatSource(total_mW=1.0),)), "HeatFlux belongs"),
    ],
)
def test_cases_refuse(make, what):
    with pytest.raises(InputError, match=what):
        make()


def test_film_unit():
    assert Convection(film_W_per_m2_K=10.0, ambient_degC=20.0).film == pytest.approx(0.01)

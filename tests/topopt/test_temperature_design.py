"""Temperatures of designs: gradients, layers in series by formula, a fin, bad input."""

import numpy as np
import pytest
from design_gradients import smallest_error
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.fea.heat import conduct
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.heatcase import Convection, FixedTemperature, HeatCase, HeatSource
from voxelmat.model.material import Constant, Material
from voxelmat.model.measure_physics import MeanTemperature, PeakTemperature, ThermalCompliance
from voxelmat.model.part import Part
from voxelmat.model.region import Box, FaceRegion
from voxelmat.model.thermal import conductivity_slopes, mixed_conductivity
from voxelmat.topopt.physics import Physics
from voxelmat.topopt.response_temperature import temperature_response

SPACING = (1.0, 0.9, 1.2)
SHAPE = (4, 3, 2)  # i, j, k


def resin(name, k, E=1000.0):
    return Material(
        name=name, kind="rigid", E=Constant(value=E, unit="MPa"), nu=Constant(value=0.3),
        density=Constant(value=1.1e-9, unit="tonne/mm3"),
        conductivity=None if k is None else Constant(value=k, unit="W/(m K)"),
    )  # fmt: skip


def part(conductivities, shape=SHAPE, spacing=SPACING):
    resins = tuple(resin(f"resin{n}", k) for n, k in enumerate(conductivities))
    return Part(
        grid=VoxelGrid(shape=shape, spacing=spacing), resins=resins,
        palette=(EMPTY, Blend.pure("resin0")), labels=np.ones(shape, np.uint16),
    )  # fmt: skip


def case(film=False, levels=(20.0, 35.0)):
    fixed = (
        FixedTemperature(region=FaceRegion(name="cold", side="x-"), temperature_degC=levels[0]),
        FixedTemperature(
            region=Box(name="warm", low=(3.9, -1, -1), high=(9, 1, 9)), temperature_degC=levels[1]
        ),
    )
    return HeatCase(
        name="on", fixed=fixed[: len(set(levels))],
        convection=(Convection(film_W_per_m2_K=500.0, ambient_degC=25.0),) if film else (),
        sources=(HeatSource(total_mW=40.0),),
    )  # fmt: skip


TOP = FaceRegion(name="top", side="z+")
MEASURES = {
    "peak": lambda c: PeakTemperature(heat_case=c),
    "peak at the top": lambda c: PeakTemperature(heat_case=c, region=TOP, exponent=6.0),
    "mean": lambda c: MeanTemperature(heat_case=c, region=TOP),
    "compliance": lambda c: ThermalCompliance(heat_case=c, void_W_per_m_K=0.026),
}


def build(unknowns, measure, conductivities, void=True, penalty=3.0, **kw):
    p = part(conductivities, **kw)
    n = len(conductivities)
    u = unknowns(
        p.grid.shape[::-1], [1000.0] * n, [0.3] * n, void=void, spacing=p.grid.spacing,
        penalty=penalty,
    )  # fmt: skip
    return u, temperature_response(measure, p, u), p


@settings(
    max_examples=16, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(
    seed=st.integers(0, 10**6), k=st.sampled_from([[0.2], [0.2, 1.5], [0.1, 0.3, 4.0]]),
    void=st.booleans(), film=st.booleans(), measure=st.sampled_from(sorted(MEASURES)),
    levels=st.sampled_from([(20.0, 35.0), (20.0, 20.0)]),
)  # fmt: skip
def test_gradient_against_central_differences(unknowns, seed, k, void, film, measure, levels):
    # I3: V over the step, minimum < 1e-6.
    u, r, _ = build(unknowns, MEASURES[measure](case(film, levels)), k, void or len(k) == 1)
    u.sharpness = 1.0
    error, *_ = smallest_error(u, r, Physics((), SPACING, tolerance=1e-12), seed=seed)
    assert error < 1e-6


def test_slopes_of_the_mixed_conductivity():
    rng = np.random.default_rng(0)
    w, k = rng.dirichlet(np.ones(4), 5), np.array([0.1, 0.2, 3.0, 40.0])
    d = rng.standard_normal((5, 4))
    d -= d.mean(axis=1, keepdims=True)
    step = 1e-6
    mixed = mixed_conductivity(w, k)
    slow = (mixed_conductivity(w + step * d, k) - mixed_conductivity(w - step * d, k)) / (2 * step)
    found = (conductivity_slopes(w, k, mixed) * d).sum(axis=1)
    np.testing.assert_allclose(found, slow, rtol=1e-7)


def test_layers_in_series_by_the_formula(unknowns):
    # Two layers between fixed temperatures and a flux through them: T falls as t / k (textbook).
    aim = HeatCase(
        name="through",
        fixed=(FixedTemperature(region=FaceRegion(name="c", side="x-"), temperature_degC=20.0),),
        sources=(
            HeatSource(total_mW=50.0, region=Box(name="end", low=(3.01, -1, -1), high=(9, 9, 9))),
        ),
    )
    u, r, p = build(unknowns, PeakTemperature(heat_case=aim, exponent=32.0), [0.2, 2.0], void=False)
    x = np.zeros(SHAPE[::-1])
    x[:, :, 2:] = 1.0
    physics = Physics((), SPACING, tolerance=1e-11)
    u = unknowns(SHAPE[::-1], [1000.0] * 2, [0.3] * 2, void=False, spacing=SPACING, radius=0.5)
    r = temperature_response(PeakTemperature(heat_case=aim, exponent=32.0), p, u)
    physics.update(u.forward(x.ravel()))
    area = 3 * 0.9 * 2 * 1.2
    # The last voxel makes the heat: it is half on its inner nodes, half on the face beyond.
    hottest = 50.0 / area * (2.0 / 0.2 + 1.0 / 2.0) + 25.0 / area * 1.0 / 2.0
    assert r.value(physics)[0] == pytest.approx(20.0 + hottest, rel=1e-8)


def test_solid_design_has_the_temperature_of_the_heat_solver(unknowns):
    aim = case(film=True)
    u, _, p = build(unknowns, MEASURES["mean"](aim), [0.2])
    solved = conduct(p, aim)
    physics = Physics((), SPACING, tolerance=1e-12)
    physics.update(u.forward(np.ones(u.n)))
    hottest = temperature_response(MEASURES["peak"](aim), p, u).value(physics)[0]
    assert hottest == pytest.approx(float(np.nanmax(solved.temperature)), rel=1e-9)
    top = temperature_response(MEASURES["mean"](aim), p, u).value(physics)[0]
    assert top == pytest.approx(float(solved.temperature[:, :, -1].mean()), rel=1e-9)


def test_peak_comes_to_the_true_maximum(unknowns):
    u, r, _ = build(unknowns, MEASURES["peak"](case()), [0.2])
    physics = Physics((), SPACING, tolerance=1e-10)
    rng = np.random.default_rng(0)
    x = rng.uniform(0.3, 1.0, u.n)
    for n in range(25):  # a design that settles
        physics.renewing = n % 5 == 0
        physics.update(u.forward(x))
        value, _ = r.value(physics)
        true = 20.0 + float(r.conducting.solved(physics)[1].max())
        x = 0.5 * x + 0.4
    assert value == pytest.approx(true, rel=1e-4)
    assert r.truth(physics) == true


def test_bad_input(unknowns):
    with pytest.raises(InputError, match="no conductivity for 'resin1'"):
        build(unknowns, MEASURES["peak"](case()), [0.2, None])
    nowhere = Box(name="nowhere", low=(90, 90, 90), high=(91, 91, 91))
    with pytest.raises(InputError, match="holds no node"):
        build(unknowns, MeanTemperature(heat_case=case(), region=nowhere), [0.2])
    with pytest.raises(InputError, match="above 0 W"):
        PeakTemperature(heat_case=case(), void_W_per_m_K=0.0)
    with pytest.raises(InputError, match="exponent"):
        PeakTemperature(heat_case=case(), exponent=1.0)

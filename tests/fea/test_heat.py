"""Steady conduction: from a part and a heat case to a checked result."""

import re

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.fea.heat import conduct, conduct_over_time
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.heatcase import Convection, FixedTemperature, HeatCase, HeatFlux, HeatSource
from voxelmat.model.material import Constant, Material
from voxelmat.model.part import Part
from voxelmat.model.region import Box, FaceRegion, LabelRegion, solid_nodes

LEFT, RIGHT = FaceRegion(name="left", side="x-"), FaceRegion(name="right", side="x+")
TOP = FaceRegion(name="top", side="z+")


def resin(name="resin", k=0.2):
    """An invented resin."""
    return Material(
        name=name,
        kind="rigid",
        E=Constant(value=1000.0),
        nu=Constant(value=0.3),
        density=Constant(value=1.2e-9),
        conductivity=None if k is None else Constant(value=k, unit="W/(m K)"),
        heat_capacity=Constant(value=1500.0, unit="J/(kg K)"),
        temperature_range_degC=(-50.0, 300.0),
    )


def part_of(labels, *resins, spacing=(1.0, 1.0, 1.0), **more):
    labels = np.asarray(labels, dtype=np.uint16)
    return Part(
        grid=VoxelGrid(shape=labels.shape, spacing=spacing),
        resins=resins,
        palette=(EMPTY, *(Blend.pure(m.name) for m in resins)),
        labels=labels,
        **more,
    )


def between(left, right, **more):
    fixed = tuple(
        FixedTemperature(region=r, temperature_degC=t) for r, t in ((LEFT, left), (RIGHT, right))
    )
    return HeatCase(name="a", fixed=fixed, **more)


def test_slab_is_exact():
    # T linear, flux = k (T1 - T2) / L, heat = flux A (Fourier's law).
    part = part_of(np.ones((7, 3, 4)), resin(), spacing=(0.5, 2.0, 0.3))
    result = conduct(part, between(80.0, 10.0))
    x = part.grid.nodes()[0]
    assert result.temperature.shape == (8, 4, 5)
    np.testing.assert_allclose(
        result.temperature, np.broadcast_to((80 - 20 * x)[:, None, None], (8, 4, 5)), atol=1e-7
    )
    np.testing.assert_allclose(result.flux[..., 0], 0.2 * 20, rtol=1e-6)
    np.testing.assert_allclose(result.flux[..., 1:], 0, atol=1e-6)
    heat = 0.2 * 20 * (3 * 2.0) * (4 * 0.3)
    assert result.flows["fixed temperature 1 on 'left'"] == pytest.approx(heat)
    assert result.flows["fixed temperature 2 on 'right'"] == pytest.approx(-heat)
    assert result.balance < 1e-9
    assert (result.highest.value, result.highest.place_mm[0]) == (80.0, 0.0)
    assert (result.lowest.value, result.lowest.place_mm[0]) == (10.0, 3.5)
    assert result.cautions == ()
    assert result.provenance.inputs["part"] == part.digest


def test_layers_in_series_and_in_parallel_are_exact():
    # Resistances add in series, conductances in parallel (formula); 1000:1.
    labels = np.ones((6, 2, 2))
    labels[2:] = 2
    a, b = resin("a", 0.1), resin("b", 100.0)
    result = conduct(part_of(labels, a, b), between(100.0, 0.0))
    heat = 100 / (2 / 0.1 + 4 / 100) * 4
    assert result.flows["fixed temperature 1 on 'left'"] == pytest.approx(heat, rel=1e-7)
    joint = 100 - heat / 4 * 2 / 0.1
    np.testing.assert_allclose(result.temperature[2], joint, atol=1e-6)
    labels = np.ones((6, 2, 2))
    labels[:, 1] = 2
    result = conduct(part_of(labels, a, b), between(100.0, 0.0))
    heat = (0.1 + 100.0) * 2 * 100 / 6
    assert result.flows["fixed temperature 1 on 'left'"] == pytest.approx(heat, rel=1e-7)


def test_wall_between_two_films_is_exact():
    # U = 1 / (1/h1 + L/k + 1/h2) (formula); 1 W/(m^2 K) = 1e-3 mW/(mm^2 K).
    part = part_of(np.ones((5, 2, 3)), resin())
    films = (
        Convection(region=LEFT, film_W_per_m2_K=8.0, ambient_degC=22.0),
        Convection(region=RIGHT, film_W_per_m2_K=25.0, ambient_degC=-10.0),
    )
    result = conduct(part, HeatCase(name="a", convection=films))
    flux = 32.0 / (1 / 0.008 + 5 / 0.2 + 1 / 0.025)
    assert result.flows["convection 1 on 'left'"] == pytest.approx(6 * flux, rel=1e-8)
    np.testing.assert_allclose(result.temperature[0], 22 - flux / 0.008, atol=1e-8)
    np.testing.assert_allclose(result.temperature[-1], -10 + flux / 0.025, atol=1e-8)
    assert result.balance < 1e-8


def test_fin_with_an_insulated_tip():
    # cosh(m (L - x)) / cosh(m L), m^2 = h P / (k A): F. P. Incropera & D. P. DeWitt, Fundamentals
    # of Heat and Mass Transfer, table 3.4, from memory. One voxel thick: one-dimensional.
    part = part_of(np.ones((40, 1, 1)), resin(k=10.0), spacing=(0.5, 1.0, 1.0))
    bottom = FaceRegion(name="bottom", side="z-")
    case = HeatCase(
        name="fin",
        fixed=(FixedTemperature(region=LEFT, temperature_degC=100.0),),
        convection=tuple(
            Convection(region=r, film_W_per_m2_K=20.0, ambient_degC=20.0) for r in (TOP, bottom)
        ),
    )
    result = conduct(part, case)
    m = np.sqrt(2 * 0.02 / (10.0 * 1.0))
    x = part.grid.nodes()[0]
    expected = 20 + 80 * np.cosh(m * (20 - x)) / np.cosh(m * 20)
    np.testing.assert_allclose(result.temperature[:, 0, 1], expected, atol=0.01)
    heat = 80 * 10.0 * m * np.tanh(m * 20)  # a width of 1 mm
    assert result.flows["fixed temperature 1 on 'left'"] == pytest.approx(heat, rel=1e-3)


def test_flux_and_source_in_a_slab():
    # Left held at T0, heat q in at the right, s made inside: T = T0 + (q + s L) x/k - s x^2/(2k).
    part = part_of(np.ones((8, 2, 2)), resin())
    case = HeatCase(
        name="a",
        fixed=(FixedTemperature(region=LEFT, temperature_degC=20.0),),
        flux=(HeatFlux(region=RIGHT, flux_mW_per_mm2=0.5),),
        sources=(HeatSource(density_mW_per_mm3=0.1),),
    )
    result = conduct(part, case)
    x = part.grid.nodes()[0]
    expected = 20 + (0.5 + 0.1 * 8) * x / 0.2 - 0.1 * x**2 / 0.4
    np.testing.assert_allclose(result.temperature[:, 1, 1], expected, atol=1e-7)
    assert result.flows["heat flux 1 on 'right'"] == pytest.approx(2.0)
    assert result.flows["heat source 1 in the whole part"] == pytest.approx(3.2)
    assert result.flows["fixed temperature 1 on 'left'"] == pytest.approx(-5.2)
    total = HeatCase(
        name="a", fixed=case.fixed, flux=case.flux, sources=(HeatSource(total_mW=3.2),)
    )
    np.testing.assert_allclose(conduct(part, total).temperature, result.temperature, atol=1e-7)


def ball(n, radius):
    """A ball in n^3 voxels of 1 mm, with the fill of each voxel and its distance."""
    fine = 4
    at = (np.arange(n * fine) + 0.5) / fine - n / 2
    inside = at[:, None, None] ** 2 + at[:, None] ** 2 + at**2 < radius**2
    fill = inside.reshape(n, fine, n, fine, n, fine).mean(axis=(1, 3, 5))
    centre = np.arange(n) + 0.5 - n / 2
    far = np.sqrt(centre[:, None, None] ** 2 + centre[:, None] ** 2 + centre**2) - radius
    occupancy = np.round(fill * 255).astype(np.uint8)
    distance = np.clip(np.round(far * 16), -127, 127).astype(np.int8)
    return part_of(occupancy > 0, resin(), occupancy=occupancy, distance=distance)


def test_heated_ball_loses_its_heat_through_its_true_surface():
    # Surface q R / (3 h) above the air, centre q R^2 / (6 k) above that (H. S. Carslaw & J. C.
    # Jaeger, Conduction of Heat in Solids, 1959, chapter 9, from memory). The staircase of voxels
    # has 1.5 times the surface and would be a third too cool.
    radius = 10.0
    part = ball(24, radius)
    case = HeatCase(
        name="ball",
        convection=(Convection(film_W_per_m2_K=10.0, ambient_degC=20.0),),
        sources=(HeatSource(density_mW_per_mm3=0.01),),
    )
    result = conduct(part, case)
    surface, centre = 0.01 * radius / 0.03, 0.01 * radius**2 / 1.2
    assert result.temperature_at((12.0, 12.0, 12.0)) - 20 == pytest.approx(
        surface + centre, rel=0.02
    )
    assert result.flows["convection 1 on all surface"] == pytest.approx(
        -0.01 * 4 / 3 * np.pi * radius**3, rel=0.01
    )


@settings(deadline=None, max_examples=10)
@given(st.integers(0, 10_000))
def test_random_parts_balance_and_stay_within_the_given_temperatures(seed):
    # The discrete maximum principle holds on cubes (every coupling of the element is <= 0).
    rng = np.random.default_rng(seed)
    part = part_of(rng.integers(1, 4, (5, 6, 4)), resin("a", 0.1), resin("b", 100.0), resin("c"))
    holes = part.labels * (rng.random(part.grid.shape) < 0.8)
    holes[0, 0, 0], holes[-1, -1, -1] = 1, 1
    part = part.replace(labels=holes.astype(np.uint16))
    film = Convection(region=TOP, film_W_per_m2_K=50.0, ambient_degC=0.0)
    result = conduct(part, between(30.0, 90.0, convection=(film,)), tol=1e-10)
    assert result.balance < 1e-6
    assert 0.0 <= result.lowest.value <= result.highest.value <= 90.0
    assert sum(result.flows.values()) == pytest.approx(0, abs=1e-6 * max(result.flows.values()))


def test_one_temperature_all_over_needs_no_iteration():
    result = conduct(part_of(np.ones((3, 3, 3)), resin()), between(40.0, 40.0))
    assert result.iterations == 0
    assert result.balance == 0.0
    np.testing.assert_array_equal(result.temperature, 40.0)


def test_reading_out():
    labels = np.ones((4, 2, 2))
    labels[:, 1, 1] = 0
    result = conduct(part_of(labels, resin()), between(10.0, 50.0, initial_degC=23.0))
    voxels = result.at_voxels()
    assert voxels.flags.f_contiguous
    np.testing.assert_allclose(voxels[:, 0, 0], [15, 25, 35, 45], atol=1e-7)
    np.testing.assert_array_equal(voxels[:, 1, 1], 23.0)
    np.testing.assert_array_equal(result.at_voxels(empty_degC=-1.0)[:, 1, 1], -1.0)
    assert np.isnan(result.temperature[2, 2, 2])
    assert not result.flux[:, 1, 1].any()
    assert result.temperature_at((0.3, 0.5, 0.5)) == pytest.approx(13.0)
    assert result.temperature_at((4.0, 0.5, 0.5)) == pytest.approx(50.0)
    assert result.over(LEFT) == pytest.approx(10.0)
    assert result.over(TOP, "max") == pytest.approx(50.0)
    with pytest.raises(InputError, match="no temperature at"):
        result.temperature_at((0.3, 1.5, 1.5))
    with pytest.raises(InputError, match="reduce"):
        result.over(TOP, "median")


def test_what_holds_no_temperature_is_refused():
    part = part_of(np.ones((3, 2, 2)), resin())
    with pytest.raises(InputError, match="No temperature is fixed and no surface has a film"):
        conduct(part, HeatCase(name="a", sources=(HeatSource(total_mW=1.0),)))
    with pytest.raises(InputError, match="empty"):
        conduct(part.replace(labels=np.zeros((3, 2, 2), np.uint16)), HeatCase(name="a"))


def islands():
    labels = np.zeros((9, 3, 3))
    labels[:3], labels[4:6], labels[7:] = 1, 2, 1
    return part_of(labels, resin("a"), resin("b"))


def test_pieces_that_no_heat_reaches():
    part = islands()
    case = HeatCase(name="a", fixed=(FixedTemperature(region=LEFT, temperature_degC=50.0),))
    result = conduct(part, case)
    assert "2 pieces that no heat reaches" in result.cautions[0]
    assert "x 4 to 6" in result.cautions[0]
    assert np.isnan(result.temperature[4:]).all()
    np.testing.assert_allclose(result.temperature[:4], 50.0)
    assert result.at_voxels()[5, 1, 1] == case.initial_degC
    heated = HeatCase(
        name="a",
        fixed=case.fixed,
        sources=(HeatSource(region=LabelRegion(name="b", labels=(2,)), total_mW=1.0),),
    )
    with pytest.raises(InputError, match=r"cannot leave.*x 4 to 6"):
        conduct(part, heated)


def test_a_piece_joined_at_a_corner_is_held_through_it():
    labels = np.zeros((2, 2, 2))
    labels[0, 0, 0] = labels[1, 1, 1] = 1
    case = HeatCase(name="a", fixed=(FixedTemperature(region=LEFT, temperature_degC=50.0),))
    result = conduct(part_of(labels, resin()), case)
    np.testing.assert_allclose(result.temperature[2, 2, 2], 50.0)
    assert "1 joints between pieces are edges or corners" in result.cautions[0]


def test_bad_cases_are_refused():
    part = part_of(np.ones((4, 2, 2)), resin())
    away = Box(name="away", low=(90, 90, 90), high=(99, 99, 99))
    hot = FixedTemperature(region=LEFT, temperature_degC=50.0)
    with pytest.raises(InputError, match="holds no node"):
        conduct(
            part, HeatCase(name="a", fixed=(FixedTemperature(region=away, temperature_degC=1.0),))
        )
    film = Convection(region=away, film_W_per_m2_K=1.0, ambient_degC=1.0)
    with pytest.raises(InputError, match="no exposed surface"):
        conduct(part, HeatCase(name="a", fixed=(hot,), convection=(film,)))
    with pytest.raises(InputError, match="there is no material"):
        conduct(
            part, HeatCase(name="a", fixed=(hot,), sources=(HeatSource(region=away, total_mW=1.0),))
        )
    clash = FixedTemperature(region=TOP, temperature_degC=60.0)
    with pytest.raises(InputError, match=r"gives 60 degC.*holds at 50 degC"):
        conduct(part, HeatCase(name="a", fixed=(hot, clash)))
    with pytest.raises(InputError, match="no conductivity for 'bare'"):
        conduct(part_of(np.ones((2, 2, 2)), resin("bare", k=None)), between(1.0, 2.0))


def answer_or_refusal(run, part, case):
    try:
        return run(part, case)
    except InputError as error:
        return str(error)


@pytest.mark.parametrize("seed", range(40))
def test_any_part_ends_in_a_balanced_answer_or_a_clear_error(seed):
    # Feathers, islands, single voxels, flat ones, films from 1e-3 to 1e4 W/(m^2 K), 1000:1.
    rng = np.random.default_rng(seed)
    shape = tuple(rng.integers(1, 8, 3))
    labels = rng.integers(0, 3, shape) * (rng.random(shape) < rng.choice([0.2, 0.6, 1.0]))
    fill = np.where(labels > 0, rng.integers(1, 256, shape), 0).astype(np.uint8)
    part = part_of(
        labels, resin("a", 0.1), resin("b", 100.0), spacing=tuple(rng.uniform(0.1, 2, 3)),
        occupancy=fill if seed % 2 else None,
    )  # fmt: skip
    side = FaceRegion(name="side", side=rng.choice(["x-", "y+", "z-"]))
    film = Convection(film_W_per_m2_K=10 ** rng.uniform(-3, 4), ambient_degC=20.0)
    case = HeatCase(
        name="a",
        fixed=(FixedTemperature(region=side, temperature_degC=60.0),) * int(rng.integers(2)),
        convection=(film,) * int(rng.integers(2)),
        flux=(HeatFlux(flux_mW_per_mm2=rng.normal()),) * int(rng.integers(2)),
        sources=(HeatSource(total_mW=rng.normal()),) * int(rng.integers(2)),
    )
    for run in (conduct, lambda p, c: conduct_over_time(p, c, 50.0, steps=2).final):
        result = answer_or_refusal(run, part, case)
        if isinstance(result, str):
            assert re.search("empty|No temperature is fixed|cannot leave|exposed surface", result)
            continue
        assert result.balance < 1e-4
        known = np.isfinite(result.temperature)
        assert known.any()
        left_out = any("no heat reaches" in c for c in result.cautions)
        assert left_out or known[solid_nodes(part.solid)].all()


def test_cautions():
    cold = resin().replace(temperature_range_degC=(15.0, 30.0), glass_transition_degC=54.0)
    twice = (
        Convection(region=TOP, film_W_per_m2_K=5.0, ambient_degC=20.0),
        Convection(film_W_per_m2_K=5.0, ambient_degC=20.0),
    )
    result = conduct(part_of(np.ones((8, 2, 2)), cold), between(90.0, 20.0, convection=twice))
    assert "16 surface faces lie in more than one convection" in result.cautions[0]
    assert "its record is for 15 to 30 degC" in result.cautions[1]
    assert "glass transition at 54 degC" in result.cautions[2]

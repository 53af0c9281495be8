"""Conduction over time: series of a cooled slab, order in time, heat balance, stopping."""

import numpy as np
import pytest
import scipy.linalg

from voxelmat.errors import Cancelled, InputError
from voxelmat.fea.heat import conduct, conduct_over_time
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.heatcase import Convection, FixedTemperature, HeatCase, HeatSource
from voxelmat.model.material import Constant, Material
from voxelmat.model.part import Part
from voxelmat.model.region import FaceRegion

LEFT, RIGHT = FaceRegion(name="left", side="x-"), FaceRegion(name="right", side="x+")
# An invented resin: k 0.2 W/(m K), 1.2 g/cm^3 and 1500 J/(kg K), so 1.8 mJ/(mm^3 K).
RESIN = Material(
    name="resin",
    kind="rigid",
    E=Constant(value=1000.0),
    nu=Constant(value=0.3),
    density=Constant(value=1.2e-9),
    conductivity=Constant(value=0.2, unit="W/(m K)"),
    heat_capacity=Constant(value=1500.0, unit="J/(kg K)"),
    temperature_range_degC=(-50.0, 300.0),
)
DIFFUSIVITY = 0.2 / 1.8  # mm^2/s


def slab(n, length=10.0):
    return Part.uniform(VoxelGrid(shape=(n, 1, 1), spacing=(length / n, 1.0, 1.0)), RESIN)


def quenched(start=100.0, ends=0.0):
    fixed = tuple(FixedTemperature(region=r, temperature_degC=ends) for r in (LEFT, RIGHT))
    return HeatCase(name="quenched", fixed=fixed, initial_degC=start)


def series(x, time, length=10.0):
    """Slab at 1, faces at 0 from time 0 on, x from its left face.

    4/pi sum 1/(2n+1) exp(-a (2n+1)^2 pi^2 t / L^2) sin((2n+1) pi x / L): H. S. Carslaw & J. C.
    Jaeger, Conduction of Heat in Solids (1959), section 3.3.
    """
    odd = np.arange(1, 400, 2)[:, None]
    decay = np.exp(-DIFFUSIVITY * (odd * np.pi / length) ** 2 * time)
    return (4 / np.pi * decay / odd * np.sin(odd * np.pi * x / length)).sum(axis=0)


@pytest.mark.parametrize("capacity", ["lumped", "consistent"])
def test_suddenly_cooled_slab_follows_the_series(capacity):
    # Own bound on the error: space 40 voxels, second order; 0.1 of 100 degC.
    part = slab(40)
    result = conduct_over_time(
        part, quenched(), 100.0, steps=100, saves=4, watch=[(5.0, 0.5, 0.5)], capacity=capacity
    )
    np.testing.assert_allclose(result.saved_s, [0, 25, 50, 75, 100])
    x = part.grid.nodes()[0]
    for time, field in zip(result.saved_s[1:], result.saved[1:], strict=True):
        np.testing.assert_allclose(field[:, 0, 0], 100 * series(x, time), atol=0.1)
    centre = [100 * series(np.array([5.0]), t)[0] for t in result.time_s[10:]]
    np.testing.assert_allclose(result.watched_degC[10:, 0], centre, atol=0.2)
    np.testing.assert_allclose(result.temperature_at((5.0, 0.5, 0.5))[-1], centre[-1], atol=0.1)
    assert result.complete
    assert result.balance < 1e-6


def test_voxels_converge_with_order_2_on_the_series():
    errors = []
    for n in (10, 20, 40):
        part = slab(n)
        result = conduct_over_time(part, quenched(1.0), 60.0, steps=240)
        x = part.grid.nodes()[0]
        errors.append(np.abs(result.final.temperature[:, 0, 0] - series(x, 60.0)).max())
    order = np.log2(np.array(errors[:-1]) / errors[1:])
    np.testing.assert_allclose(order, 2.0, atol=0.15)


@pytest.mark.parametrize(("scheme", "order"), [("backward-euler", 1.0), ("sdirk2", 2.0)])
@pytest.mark.parametrize("capacity", ["lumped", "consistent"])
def test_order_in_time_after_a_jump(scheme, order, capacity):
    # Against the matrix exponential of the same voxels in one dimension (scipy.linalg.expm).
    n, h, time = 12, 10.0 / 12, 60.0
    K = 0.2 / h * (2 * np.eye(n - 1) - np.eye(n - 1, k=1) - np.eye(n - 1, k=-1))
    C = 1.8 * h * np.eye(n - 1)
    start = np.full(n - 1, 50.0)
    if capacity == "consistent":
        C = 1.8 * h / 6 * (4 * np.eye(n - 1) + np.eye(n - 1, k=1) + np.eye(n - 1, k=-1))
    expected = scipy.linalg.expm(-np.linalg.solve(C, K) * time) @ start
    errors = []
    for steps in (8, 16, 32):
        result = conduct_over_time(
            slab(n), quenched(50.0), time, steps=steps, scheme=scheme, capacity=capacity, tol=1e-11
        )
        errors.append(np.abs(result.final.temperature[1:-1, 0, 0] - expected).max())
    found = np.log2(np.array(errors[:-1]) / errors[1:])
    np.testing.assert_allclose(found, order, atol=0.25)


def blocks():
    """Two materials and an island, in 3-D."""
    hot = RESIN.replace(name="metal", conductivity=Constant(value=150.0))
    labels = np.ones((7, 5, 4), dtype=np.uint16)
    labels[2:4, 1:3, 1:3] = 2
    labels[5] = 0
    return Part(
        grid=VoxelGrid(shape=(7, 5, 4), spacing=(1.0, 0.7, 0.5)),
        resins=(RESIN, hot),
        palette=(EMPTY, Blend.pure("resin"), Blend.pure("metal")),
        labels=labels,
    )


@pytest.mark.parametrize("scheme", ["backward-euler", "sdirk2"])
@pytest.mark.parametrize("capacity", ["lumped", "consistent"])
def test_heat_in_is_heat_out_plus_heat_stored(scheme, capacity):
    part = blocks()
    case = HeatCase(
        name="a",
        fixed=(FixedTemperature(region=LEFT, temperature_degC=60.0),),
        convection=(Convection(film_W_per_m2_K=15.0, ambient_degC=10.0),),
        sources=(HeatSource(total_mW=20.0),),
    )
    result = conduct_over_time(
        part, case, 30.0, steps=6, scheme=scheme, capacity=capacity, tol=1e-10
    )
    assert result.balance < 1e-7
    # What is stored is what the voxels gained: c V times the mean of the corners (formula).
    held = np.isfinite(result.saved[0])
    start = np.where(held, 23.0, np.nan)
    start[0] = 60.0
    gain = result.final.temperature - start
    cells = sum(
        np.nan_to_num(gain[a : a + 7, b : b + 5, c : c + 4])
        for a in (0, 1)
        for b in (0, 1)
        for c in (0, 1)
    )
    energy = (cells / 8 * part.solid).sum() * 1.8 * part.grid.voxel_volume
    assert result.stored.sum() * result.step_s == pytest.approx(energy, rel=1e-9)
    total = sum(result.flows.values())
    np.testing.assert_allclose(total, result.stored, rtol=1e-6)


def test_a_long_time_ends_in_the_steady_state():
    case = HeatCase(
        name="a",
        fixed=(FixedTemperature(region=LEFT, temperature_degC=60.0),),
        convection=(Convection(region=RIGHT, film_W_per_m2_K=15.0, ambient_degC=10.0),),
    )
    part = slab(8)
    late = conduct_over_time(part, case, 1e5, steps=20).final
    np.testing.assert_allclose(late.temperature, conduct(part, case).temperature, atol=1e-4)


def test_free_part_warms_evenly():
    # No hold at all: T = T0 + P t / (m c) (formula).
    part = slab(5)
    result = conduct_over_time(
        part, HeatCase(name="a", sources=(HeatSource(total_mW=9.0),)), 10.0, step_s=2.0
    )
    np.testing.assert_allclose(result.final.temperature, 23 + 9 * 10 / (10 * 1.8), rtol=1e-9)
    np.testing.assert_allclose(result.highest_degC, 23 + 9 * result.time_s / 18, rtol=1e-9)


@pytest.mark.parametrize("steps", [1, 3, 50])
def test_backward_euler_with_lumped_capacity_never_overshoots(steps):
    part = Part.uniform(VoxelGrid(shape=(9, 6, 6), spacing=(1.0, 1.0, 1.0)), RESIN)
    result = conduct_over_time(part, quenched(), 5.0, steps=steps, scheme="backward-euler")
    assert result.lowest_degC.min() >= -1e-6
    assert result.highest_degC.max() <= 100.0 + 1e-6
    assert not any("pass the given" in c for c in result.cautions)


def test_an_overshoot_is_told():
    # A consistent capacity rises above the start next to a sudden change in short steps.
    result = conduct_over_time(slab(10), quenched(), 1.0, steps=40, capacity="consistent")
    assert result.highest_degC.max() > 101.0
    assert any("Temperatures pass the given ones" in c for c in result.cautions)


def test_going_on_from_a_result():
    part, case = slab(8), quenched()
    whole = conduct_over_time(part, case, 20.0, steps=10, tol=1e-11)
    half = conduct_over_time(part, case, 10.0, steps=5, tol=1e-11)
    rest = conduct_over_time(part, case, 10.0, steps=5, start=half.final, tol=1e-11)
    np.testing.assert_allclose(rest.final.temperature, whole.final.temperature, atol=1e-8)
    with pytest.raises(InputError, match="another grid"):
        conduct_over_time(slab(9), case, 10.0, steps=5, start=half.final)


class StopAt:
    def __init__(self, step):
        self.step = step

    def report(self, stage, *, done, total, **figures):
        if stage == "heating" and done == self.step:
            raise Cancelled("stop")


def test_what_was_finished_is_kept_when_the_user_stops():
    part, case = slab(8), quenched()
    result = conduct_over_time(part, case, 20.0, steps=10, saves=2, monitor=StopAt(7))
    assert not result.complete
    np.testing.assert_allclose(result.time_s, np.arange(8) * 2.0)
    np.testing.assert_allclose(result.saved_s, [0, 10, 14])
    assert any("Stopped by the user at 14" in c for c in result.cautions)
    same = conduct_over_time(part, case, 14.0, steps=7)
    np.testing.assert_allclose(result.final.temperature, same.final.temperature, atol=1e-9)
    with pytest.raises(Cancelled):
        conduct_over_time(part, case, 20.0, steps=10, monitor=StopAt(0))


@pytest.mark.parametrize(
    ("more", "what"),
    [
        ({}, "either steps"),
        ({"steps": 2, "step_s": 1.0}, "either steps"),
        ({"steps": 0}, "whole number"),
        ({"step_s": -1.0}, "step_s must be above 0"),
        ({"steps": 2, "scheme": "explicit"}, "scheme is one of"),
        ({"steps": 2, "capacity": "none"}, "capacity is one of"),
        ({"steps": 2, "saves": 0}, "saves"),
        ({"steps": 2, "watch": [(99.0, 0.0, 0.0)]}, "no temperature at"),
    ],
)
def test_bad_steps_are_refused(more, what):
    with pytest.raises(InputError, match=what):
        conduct_over_time(slab(4), quenched(), 10.0, **more)


def test_missing_heat_capacity_names_the_resin():
    part = Part.uniform(slab(2).grid, RESIN.replace(heat_capacity=None))
    with pytest.raises(InputError, match="no heat capacity for 'resin'"):
        conduct_over_time(part, quenched(), 1.0, steps=1)
    with pytest.raises(InputError, match="duration"):
        conduct_over_time(slab(2), quenched(), 0.0, steps=1)

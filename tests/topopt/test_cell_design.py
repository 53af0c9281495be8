"""Designs of a periodic cell: gradients, a laminate, bounds, negative Poisson ratio."""

import numpy as np
import pytest
from design_gradients import smallest_error
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.model.bounds import hashin_shtrikman
from voxelmat.model.measure_physics import CellProperty, CellTarget
from voxelmat.topopt.fields import Choice
from voxelmat.topopt.filter import ConeFilter
from voxelmat.topopt.physics import Physics
from voxelmat.topopt.response_cell import cell_response, effective_stiffness

SPACING = (1.0, 0.9, 1.2)
RESINS = (([100.0], [0.3]), ([1.0, 2000.0], [0.49, 0.35]), ([1.0, 50.0, 2000.0], [0.49, 0.4, 0.35]))
# C1: laminate 50/50 normal to z, E 1 / nu .45 and E 100 / nu .3 (G. E. Backus, J. Geophys. Res.
# 67 (1962) 4427, formula evaluated; exact at any resolution).
LAMINATE = np.zeros((6, 6))
LAMINATE[:3, :3] = [
    [58.43921215, 19.63284611, 4.59946340],
    [19.63284611, 58.43921215, 4.59946340],
    [4.59946340, 4.59946340, 7.37830586],
]
LAMINATE[3, 3], LAMINATE[4, 4], LAMINATE[5, 5] = 19.40318302, 0.68352700, 0.68352700
TARGET = CellTarget(stiffness=np.where(np.eye(6)[::-1] > 0, np.nan, LAMINATE))
MEASURES = (
    CellProperty(kind="bulk"), CellProperty(kind="shear"), CellProperty(kind="young"),
    CellProperty(kind="poisson", axes=("x", "z")), CellProperty(kind="shear_plane"),
    CellProperty(kind="axial", axes=("y", "z")), TARGET,
)  # fmt: skip


def cell_physics(tolerance=1e-10):
    return Physics((), SPACING, tolerance=tolerance)


@settings(
    max_examples=14, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(
    seed=st.integers(0, 10**6), resins=st.sampled_from(RESINS), measure=st.sampled_from(MEASURES)
)
def test_gradient_against_central_differences(unknowns, seed, resins, measure):
    # I3: V over the step, minimum < 1e-6.
    u = unknowns((2, 2, 3), *resins, spacing=SPACING, floor=1e-3)
    error, *_ = smallest_error(
        u, cell_response(measure), cell_physics(), seed=seed, steps=(1e-2, 1e-3, 1e-4, 1e-5)
    )
    assert error < 1e-6


def test_laminate_meets_its_own_stiffness(unknowns):
    u = unknowns((4, 2, 2), [1.0, 100.0], [0.45, 0.3], void=False, radius=0.5)
    x = np.zeros((4, 2, 2))
    x[2:] = 1.0
    physics = cell_physics()
    physics.update(u.forward(x.ravel()))
    C, _ = effective_stiffness(physics)
    np.testing.assert_allclose(C, LAMINATE, rtol=1e-8, atol=1e-8)
    r = cell_response(CellTarget(stiffness=LAMINATE))
    assert r.report(r.value(physics)[0]) < 1e-8
    # C1: Ez 6.836369, Ex 50.513947, the same formula.
    for axis, E in (("z", 6.836369), ("x", 50.513947)):
        young = cell_response(CellProperty(kind="young", axes=(axis, axis)))
        assert young.value(physics)[0] == pytest.approx(E, rel=1e-7)


def test_same_solve_serves_two_responses(unknowns):
    u = unknowns((2, 2, 3), *RESINS[1], spacing=SPACING)
    physics = cell_physics()
    physics.update(u.forward(np.full(u.n, 0.5)))
    cell_response(MEASURES[0]).value(physics)
    steps = physics.cg_iterations
    cell_response(MEASURES[1]).value(physics)
    assert physics.cg_iterations == steps


def test_uniform_cell_is_its_material(unknowns):
    u = unknowns((2, 3, 2), [100.0], [0.3], spacing=SPACING, floor=1e-9)
    physics = cell_physics()
    physics.update(u.forward(np.ones(u.n)))
    for measure, expected in (
        (CellProperty(kind="bulk"), 100 / 3 / 0.4), (CellProperty(kind="shear"), 100 / 2.6),
        (CellProperty(kind="young", axes=("z", "z")), 100.0),
        (CellProperty(kind="poisson", axes=("y", "x")), 0.3),
        (CellProperty(kind="shear_plane", axes=("x", "z")), 100 / 2.6),
    ):  # fmt: skip
        assert cell_response(measure).value(physics)[0] == pytest.approx(expected, rel=1e-7)


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda: CellProperty(kind="area"), "one of bulk"),
        (lambda: CellProperty(kind="poisson", axes=("x", "x")), "two different axes"),
        (lambda: CellProperty(kind="bulk", axes=("x", "w")), "two of x, y, z"),
        (lambda: CellTarget(stiffness=np.eye(3)), "6x6"),
        (lambda: CellTarget(stiffness=np.full((6, 6), np.nan)), "says nothing"),
        (lambda: CellTarget(stiffness=np.triu(np.ones((6, 6)))), "symmetric"),
    ],
)
def test_bad_measures_are_refused(change, words):
    with pytest.raises(InputError, match=words):
        change()


@pytest.mark.parametrize("radius", [1.5, 4.0])
def test_filter_of_a_cell_does_not_know_where_the_cell_begins(radius):
    # Moved round the cell before or after the filter: the same; and its transpose is one.
    rng = np.random.default_rng(0)
    x, y = rng.random((2, 4, 3, 5))
    around = ConeFilter(np.ones(x.shape, bool), SPACING, radius, periodic=True)
    move = {"shift": (1, 2, 3), "axis": (0, 1, 2)}
    np.testing.assert_allclose(around(np.roll(x, **move)), np.roll(around(x), **move), rtol=1e-12)
    assert np.vdot(around(x), y) == pytest.approx(np.vdot(x, around.transpose(y)), rel=1e-12)
    np.testing.assert_allclose(around(np.ones(x.shape)), 1.0, rtol=1e-12)
    plain = ConeFilter(np.ones(x.shape, bool), SPACING, radius)
    assert not np.allclose(plain(x), around(x))


def test_cell_whose_material_does_not_reach_through_has_no_poisson_ratio(unknowns):
    outside = np.zeros((3, 3, 3), bool)
    outside[:, :, 0] = True
    choice = Choice(
        domain=~outside, solid=outside & False, empty=outside & False,
        resin=np.full(outside.shape, -1), fill=(~outside).astype(float),
        kept_lam=np.zeros(outside.shape), kept_mu=np.zeros(outside.shape),
    )  # fmt: skip
    u = unknowns((3, 3, 3), [1.0, 9.0], [0.3, 0.3], void=False, choice=choice, spacing=SPACING)
    physics = cell_physics()
    physics.update(u.forward(np.full(u.n, 0.5)))
    with pytest.raises(InputError, match="no load in some direction"):
        cell_response(CellProperty(kind="poisson")).value(physics)
    assert cell_response(CellProperty(kind="axial", axes=("y", "y"))).value(physics)[0] > 0


@pytest.mark.parametrize("outside_in", [False, True])
def test_two_phase_cells_keep_within_their_bounds(unknowns, outside_in):
    # C6: Hashin & Shtrikman 1963, E 1 and 100, nu .3; at a fraction of 0.2 K in [1.1631, 8.1135]
    # and G in [.5813, 4.829] (formula evaluated). For cubic cells K and the Voigt mean of G.
    bulk, shear = np.array([1.0, 100.0]) / 1.2, np.array([1.0, 100.0]) / 2.6
    w = np.array([[0.8], [0.2]])
    found = [float(np.exp(v[0])) for b in hashin_shtrikman(w, bulk, shear) for v in (b.low, b.high)]
    assert found == pytest.approx([1.1631, 8.1135, 0.5813, 4.829], rel=1e-4)
    stiff = np.zeros((6, 6, 6))
    stiff[1:5, 1:5, 1:5] = 1.0  # a cube, or walls round one
    stiff = 1.0 - stiff if outside_in else stiff
    u = unknowns(stiff.shape, [1.0, 100.0], [0.3, 0.3], void=False, radius=0.5, spacing=(1, 1, 1))
    physics = Physics((), (1, 1, 1), tolerance=1e-8)
    physics.update(u.forward(stiff.ravel()))
    share = stiff.mean()
    bands = hashin_shtrikman(np.array([[1 - share], [share]]), bulk, shear)
    where = []
    for kind, band in zip(("bulk", "shear"), bands, strict=True):
        value = cell_response(CellProperty(kind=kind)).value(physics)[0]
        low, high = float(np.exp(band.low[0])), float(np.exp(band.high[0]))
        assert low < value < high
        where.append((value - low) / (high - low))
    # Stiff walls come near the upper bound, a stiff cube near the lower one.
    assert min(where) > 0.8 if outside_in else max(where) < 0.2

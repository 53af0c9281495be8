"""Warping of designs: gradients, the bimetal of Timoshenko, one material, bad input."""

import numpy as np
import pytest
from design_gradients import smallest_error
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.loadcase import Support
from voxelmat.model.material import Constant, Material
from voxelmat.model.measure_physics import Warpage
from voxelmat.model.part import Part
from voxelmat.model.region import Box, FaceRegion
from voxelmat.topopt.physics import Physics
from voxelmat.topopt.response_warp import mixed_expansion, warp_response

SHAPE, SPACING = (4, 3, 2), (1.0, 0.9, 1.2)
RESINS = (
    ([100.0], [0.3], [8e-5]),
    ([1.0, 2000.0], [0.49, 0.35], [2e-4, 7e-5]),
    ([1.0, 50.0, 2000.0], [0.49, 0.4, 0.35], [2e-4, 1.2e-4, 7e-5]),
    ([100.0, 100.0], [0.3, 0.3], [1e-4, 5e-5]),
)


def part(E, nu, alpha, shape=SHAPE, spacing=SPACING):
    resins = tuple(
        Material(
            name=f"resin{n}", kind="rigid", E=Constant(value=e, unit="MPa"),
            nu=Constant(value=v), density=Constant(value=1.1e-9, unit="tonne/mm3"),
            expansion=None if a is None else Constant(value=a, unit="1/K"),
        )
        for n, (e, v, a) in enumerate(zip(E, nu, alpha, strict=True))
    )  # fmt: skip
    return Part(
        grid=VoxelGrid(shape=shape, spacing=spacing), resins=resins,
        palette=(EMPTY, Blend.pure("resin0")), labels=np.ones(shape, np.uint16),
    )  # fmt: skip


WALL = Support(region=FaceRegion(name="wall", side="x-"))


@settings(
    max_examples=10, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(seed=st.integers(0, 10**6), resins=st.sampled_from(RESINS), void=st.booleans())
def test_gradient_against_central_differences(unknowns, seed, resins, void):
    # I3: V over the step, minimum < 1e-6.
    E, nu, _ = resins
    u = unknowns(SHAPE[::-1], E, nu, void=void or len(E) == 1, spacing=SPACING, floor=1e-3)
    measure = Warpage(
        change_K=20.0, region=FaceRegion(name="tip", side="x+"), supports=(WALL,),
        direction=(1.0, 2.0, 0.5),
    )  # fmt: skip
    r = warp_response(measure, part(*resins), u)
    physics = Physics((), SPACING, tolerance=1e-12)
    error, value, _ = smallest_error(u, r, physics, seed=seed, steps=(1e-2, 1e-3, 1e-4, 1e-5))
    assert value > 0
    assert error < 1e-6


@pytest.mark.parametrize(("n", "curvature"), [(1.0, 1.5e-3), (10.0, 9.95851e-4)])
def test_bimetal(unknowns, n, curvature):
    # D1: Timoshenko 1925 (J. Opt. Soc. Am. 11:233), layers of equal thickness, ratio n of the
    # moduli, difference of free strain 1e-3, total thickness 1, strip 10 x 1; narrow, so one
    # voxel wide and nu 0; curvature fitted over x in [2h, L - 2h].
    E, nu, alpha = [1.0 * n, 1.0 + 1e-7], [0.0, 0.0], [0.0, 1e-3]
    h = 0.25
    p = part(E, nu, alpha, shape=(40, 1, 4), spacing=(h, h, h))
    u = unknowns((4, 1, 40), E, nu, void=False, spacing=(h, h, h), radius=0.1)
    x = np.zeros((4, 1, 40))
    x[2:] = 1.0
    end = Box(name="end", low=(9.9, -1, -1), high=(11, 2, 2))
    r = warp_response(Warpage(change_K=1.0, region=end, supports=(WALL,)), p, u)
    physics = Physics((), (h, h, h), tolerance=1e-10)
    physics.update(u.forward(x.ravel()))
    line = r.solved(physics)[1][2, 2, 0]
    at = h * np.arange(41)
    inner = (at >= 2.0) & (at <= 8.0)
    fitted = 2.0 * abs(np.polyfit(at[inner], line[inner], 2)[0])
    assert fitted == pytest.approx(curvature, rel=1e-3)
    # The measure itself: the end rises by about k L^2 / 2; the wall changes the first 2h of it.
    assert r.value(physics)[0] == pytest.approx(curvature * 10.0**2 / 2, rel=0.05)


def test_one_material_grows_and_does_not_bend(unknowns):
    E, nu, alpha = RESINS[0]
    p = part(E, nu, alpha)
    held = tuple(
        Support(region=FaceRegion(name=f"low {a}", side=f"{a}-"),
                displacement=tuple(0.0 if b == a else None for b in "xyz"))
        for a in "xyz"
    )  # fmt: skip
    u = unknowns(SHAPE[::-1], E, nu, spacing=SPACING)
    measure = Warpage(
        change_K=50.0, region=FaceRegion(name="tip", side="x+"), supports=held,
        direction=(1.0, 0.0, 0.0),
    )  # fmt: skip
    r = warp_response(measure, p, u)
    physics = Physics((), SPACING, tolerance=1e-11)
    # Any densities: voids do not change how a part of one material expands.
    physics.update(u.forward(np.random.default_rng(0).uniform(0.3, 1.0, u.n)))
    assert r.value(physics)[0] == pytest.approx(8e-5 * 50.0 * 4.0, rel=1e-8)


def test_expansion_of_blends():
    bulk, alpha = np.array([1.0, 50.0]), np.array([2.0, 0.5])
    w = np.array([[1.0, 0.0], [0.0, 1.0], [0.4, 0.6]])
    value, _, _ = mixed_expansion(w, bulk, alpha, np.array([1.0, 50.0, 7.0]))
    np.testing.assert_allclose(value[:2], alpha)
    assert 0.5 < value[2] < 2.0


def test_bad_input(unknowns):
    E, nu, _ = RESINS[1]
    u = unknowns(SHAPE[::-1], E, nu, void=False, spacing=SPACING)
    tip = FaceRegion(name="tip", side="x+")
    good = Warpage(change_K=1.0, region=tip, supports=(WALL,))
    with pytest.raises(InputError, match="no thermal expansion for 'resin1'"):
        warp_response(good, part(E, nu, [1e-4, None]), u)
    with pytest.raises(InputError):
        warp_response(Warpage(change_K=1.0, region=tip), part(*RESINS[1]), u)
    nowhere = Box(name="nowhere", low=(90, 90, 90), high=(91, 91, 91))
    with pytest.raises(InputError, match="holds no node"):
        warp_response(Warpage(change_K=1.0, region=nowhere, supports=(WALL,)), part(*RESINS[1]), u)
    with pytest.raises(InputError, match="change of temperature"):
        Warpage(change_K=0.0, region=tip)

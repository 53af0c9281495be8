"""Void law, unknowns and their transposes, by central differences and by known cases."""

import numpy as np
import pytest

from voxelmat.errors import InputError
from voxelmat.model.laws import LogMix, SelfConsistent
from voxelmat.topopt.interpolation import VoidLaw
from voxelmat.topopt.unknowns import Choice, Palette, Unknowns

SHAPE, SPACING = (3, 4, 5), (1.0, 0.8, 1.2)


def palette(E, nu, law=None):
    E, nu = np.array(E), np.array(nu)
    return Palette(
        names=tuple(f"resin{m}" for m in range(len(E))),
        bulk=E / 3 / (1 - 2 * nu),
        shear=E / 2 / (1 + nu),
        density=1e-9 * (1.0 + np.arange(len(E))),
        law=law or LogMix(),
    )


TABLE = {
    1: ([100.0], [0.3]),
    2: ([1.0, 2000.0], [0.49, 0.35]),
    3: ([1.0, 50.0, 2000.0], [0.49, 0.4, 0.35]),
}


def choice(seed=0, frozen=True, mirrors=()):
    rng = np.random.default_rng(seed)
    domain = np.ones(SHAPE, bool)
    solid, empty = np.zeros(SHAPE, bool), np.zeros(SHAPE, bool)
    resin = np.full(SHAPE, -1)
    fill, lam, mu = np.ones(SHAPE), np.zeros(SHAPE), np.zeros(SHAPE)
    if frozen:
        domain[0, 0, :2] = False
        lam[0, 0, 0], mu[0, 0, 0] = 7.0, 5.0  # kept; its neighbour lies outside the shape
        solid[1, 1], empty[2, 3, 4] = True, True
        resin[1, 1, :3] = 0
        fill = rng.uniform(0.3, 1.0, SHAPE) * domain
    return Choice(
        domain=domain, solid=solid, empty=empty, resin=resin, fill=fill,
        kept_lam=lam, kept_mu=mu, mirrors=mirrors,
    )  # fmt: skip


def void_law(kind="bounded"):
    return VoidLaw(penalty=3.0, kind=kind, floor_shear=1e-6, floor_lame=1e-6)


def unknowns(resins, void=True, law=None, kind="bounded", **kw):
    return Unknowns(
        choice(**kw), palette(*TABLE[resins], law), void=void_law(kind) if void else None,
        spacing=SPACING, radius=1.5,
    )  # fmt: skip


@pytest.mark.parametrize("kind", ["bounded", "plain"])
def test_void_law_slopes(kind):
    rng = np.random.default_rng(1)
    rho, bulk, shear = rng.uniform(0.1, 0.9, 6), rng.uniform(1, 100, 6), rng.uniform(0.3, 3, 6)
    c_lam, c_mu = rng.standard_normal((2, 6))
    law = void_law(kind)

    def pairing(r, k, g):
        lam, mu = law.forward(r, k, g)
        return c_lam * lam + c_mu * mu

    got = law.transpose(rho, bulk, shear, c_lam, c_mu)
    for n, step in enumerate((1e-6, 1e-4, 1e-6)):
        up, down = [rho, bulk, shear], [rho, bulk, shear]
        up[n], down[n] = up[n] + step, down[n] - step
        np.testing.assert_allclose(
            got[n], (pairing(*up) - pairing(*down)) / (2 * step), rtol=1e-6, atol=1e-7
        )


def test_bounded_void_law_keeps_the_porous_bound_and_plain_does_not():
    # Hashin & Shtrikman 1963, J. Mech. Phys. Solids 11:127, upper bound of a porous solid:
    # K = rho / (1/K_s + 3 (1 - rho) / (4 G_s)); plain rho^3 breaks it for a rubber.
    rho = np.linspace(0.05, 0.95, 19)
    shear = np.full(19, 1 / 2 / 1.49)
    bulk = np.full(19, 1 / 3 / 0.02)
    bound = rho / (1 / bulk + 0.75 * (1 - rho) / shear)
    lam, mu = VoidLaw(penalty=3.0, kind="bounded", floor_shear=0, floor_lame=0).forward(
        rho, bulk, shear
    )
    assert np.all(lam + 2 * mu / 3 <= bound)
    lam, mu = VoidLaw(penalty=3.0, kind="plain", floor_shear=0, floor_lame=0).forward(
        rho, bulk, shear
    )
    assert np.max((lam + 2 * mu / 3) / bound) > 2


@pytest.mark.parametrize("law", [LogMix(), SelfConsistent()])
@pytest.mark.parametrize(
    ("resins", "void"), [(1, True), (2, True), (3, True), (2, False), (3, False)]
)
def test_transpose_equals_central_differences(resins, void, law):
    rng = np.random.default_rng(resins)
    u = unknowns(resins, void, law)
    u.sharpness = 3.0
    x, direction = rng.uniform(0.2, 0.8, u.n), rng.standard_normal(u.n)
    cotangents = {
        "lam": rng.standard_normal(SHAPE), "mu": rng.standard_normal(SHAPE),
        "rho": rng.standard_normal(SHAPE), "w": rng.standard_normal((resins, *SHAPE)),
    }  # fmt: skip

    def pairing(y):
        f = u.forward(y)
        return sum(float((c * getattr(f, name)).sum()) for name, c in cotangents.items())

    slope = float(u.transpose(u.forward(x), cotangents) @ direction)
    errors = []  # I3: a V over the step with its minimum below 1e-6
    for step in 10.0 ** np.arange(-3, -7.6, -0.5):
        difference = (pairing(x + step * direction) - pairing(x - step * direction)) / (2 * step)
        errors.append(abs(difference - slope) / abs(slope))
    assert min(errors) < 1e-6


def test_frozen_and_kept_voxels_stay_what_they_are():
    u = unknowns(2)
    f = u.forward(np.full(u.n, 0.4))
    c = u.choice
    assert np.all(f.rho[c.solid] == 1)
    assert np.all(f.rho[c.empty] == 0)
    assert np.all(f.w[0][c.resin == 0] == 1)
    assert (f.lam[0, 0, 0], f.mu[0, 0, 0]) == (7.0, 5.0)
    assert f.mu[0, 0, 1] == 0
    np.testing.assert_allclose(f.w.sum(0)[c.domain], 1, rtol=1e-14)
    free = c.domain & ~c.solid & ~c.empty
    assert np.all(f.mu[c.empty] <= 1.0001e-6)
    assert np.all((f.rho[free] > 0.3) & (f.rho[free] <= 1))


def test_start_gives_the_fractions_asked_for():
    for resins, want in ((2, [0.3, 0.7]), (3, [0.2, 0.5, 0.3])):
        u = unknowns(resins, void=False, frozen=False)
        w = u.forward(u.start(1.0, np.array(want))).w
        for m, value in enumerate(want):
            np.testing.assert_allclose(w[m], value, rtol=1e-12)


def test_mirror_makes_every_design_symmetric():
    u = unknowns(2, frozen=False, mirrors=(2, 0))
    f = u.forward(np.random.default_rng(3).random(u.n))
    for axis in (2, 0):
        np.testing.assert_allclose(f.mu, np.flip(f.mu, axis), rtol=1e-12)
    assert np.ptp(f.mu) > 0


def test_two_resins_mix_in_log_modulus():
    u = unknowns(2, void=False, frozen=False)
    f = u.forward(np.full(u.n, 0.25))
    shear = u.palette.shear
    np.testing.assert_allclose(f.mu, shear[0] ** 0.75 * shear[1] ** 0.25, rtol=1e-10)


def test_identical_resins_are_one_resin():
    E, nu = [5.0, 5.0, 5.0], [0.4, 0.4, 0.4]
    u = Unknowns(choice(frozen=False), palette(E, nu), void=None, spacing=SPACING, radius=1.5)
    f = u.forward(np.random.default_rng(0).random(u.n))
    np.testing.assert_allclose(f.mu, 5 / 2.8, rtol=1e-12)
    np.testing.assert_allclose(f.lam, 5 * 0.4 / 1.4 / 0.2, rtol=1e-11)


def test_nothing_left_to_design_is_refused():
    c = choice(frozen=False)
    c.solid[:] = True
    with pytest.raises(InputError, match="Nothing is left"):
        Unknowns(c, palette(*TABLE[1]), void=void_law(), spacing=SPACING, radius=1.0)

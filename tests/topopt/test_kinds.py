"""Kinds of unknowns: pure resins, shared voxels, self-support, realisations, one of our own."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.model.laws import LogMix
from voxelmat.topopt.blending import purest, sharpen
from voxelmat.topopt.fields import Choice, Draft, Palette, Realisation
from voxelmat.topopt.interpolation import VoidLaw
from voxelmat.topopt.links import groups, spread
from voxelmat.topopt.overhang import SelfSupport
from voxelmat.topopt.unknowns import Unknowns

SHAPE, SPACING = (4, 4, 6), (1.0, 0.9, 1.1)
VOID = VoidLaw(penalty=3.0, kind="bounded", floor_shear=1e-6, floor_lame=1e-6)


def palette(count):
    E = np.geomspace(1.0, 2000.0, count) if count > 1 else np.array([100.0])
    nu = np.linspace(0.49, 0.35, count)
    return Palette(
        names=tuple(f"resin{m}" for m in range(count)), bulk=E / 3 / (1 - 2 * nu),
        shear=E / 2 / (1 + nu), density=np.ones(count), law=LogMix(),
    )  # fmt: skip


def choice(frozen=False, **changes):
    solid, empty = np.zeros(SHAPE, bool), np.zeros(SHAPE, bool)
    resin = np.full(SHAPE, -1)
    if frozen:
        solid[1, 1], empty[2, 3, 4], resin[1, 1, :3] = True, True, 0
    return Choice(
        domain=np.ones(SHAPE, bool), solid=solid, empty=empty, resin=resin, fill=np.ones(SHAPE),
        kept_lam=np.zeros(SHAPE), kept_mu=np.zeros(SHAPE), **changes,
    )  # fmt: skip


def build(count=2, void=True, frozen=False, links=None, **kw):
    return Unknowns(
        choice(frozen, **(links or {})), palette(count), void=VOID if void else None,
        spacing=SPACING, radius=1.5, **kw,
    )  # fmt: skip


def v_curve(u, seed, realisation, low=0.2, high=0.8):
    """Least relative error of central differences of all fields along a random direction."""
    rng = np.random.default_rng(seed)
    x, direction = rng.uniform(low, high, u.n), rng.standard_normal(u.n)
    fields = u.forward(x, realisation)
    cotangents = {k: rng.standard_normal(getattr(fields, k).shape) for k in ("lam", "mu", "rho",
                                                                             "w")}  # fmt: skip

    def pairing(y):
        f = u.forward(y, realisation)
        return sum(float((c * getattr(f, name)).sum()) for name, c in cotangents.items())

    slope = float(u.transpose(fields, cotangents) @ direction)
    return min(
        abs((pairing(x + h * direction) - pairing(x - h * direction)) / (2 * h) - slope)
        / abs(slope)
        for h in 10.0 ** np.arange(-3, -7.6, -0.5)
    )


def two_zones():
    zones = np.ones(SHAPE, dtype=np.intp)
    zones[:, :, 2:] = 2
    return zones


BOX = np.ones(SHAPE, bool)
CASES = {
    "pure": {"pure": True},
    "pure with frozen": {"pure": True, "frozen": True},
    "interface width": {"width": 2.0, "frozen": True},
    "blend radius": {"blend_radius": 2.2},
    "extruded": {"links": {"group": groups(BOX, (), (2,), {})}, "frozen": True},
    "repeated": {"links": {"group": groups(BOX, (), (), {2: 2})}},
    "repeated and mirrored": {"links": {"group": groups(BOX, (2,), (), {2: 2}), "mirrors": (2,)}},
    "wide and extruded": {"links": {"group": groups(BOX, (), (1,), {})}, "width": 1.9},
    "zones": {"links": {"zones": two_zones()}, "frozen": True},
    "self-support": {"overhang": 40.0, "frozen": True},
    "empty beyond": {"empty_beyond": True, "frozen": True},
}


@settings(max_examples=3, deadline=None)
@pytest.mark.parametrize("name", CASES)
@given(seed=st.integers(0, 999), count=st.sampled_from([2, 3, 5]), void=st.booleans())
def test_transposes_equal_central_differences(name, seed, count, void):
    # I3: the V over the step has its minimum below 1e-6.
    u = build(count, void or "overhang" in CASES[name], **CASES[name])
    u.sharpness = 3.0
    assert v_curve(u, seed, Realisation()) < 1e-6


@pytest.mark.parametrize(
    "realisation",
    [
        Realisation(threshold=0.2, bias=(0.8, -0.8, -0.8)),
        Realisation(threshold=-0.2, bias=(-0.8, 0.8, 0.8)),
        Realisation(stiffness=(1.1, 0.8, 1.0)),
    ],
)
def test_realisations_are_differentiated_exactly(realisation):
    u = build(3, pure=True)
    u.sharpness = 4.0
    assert v_curve(u, 1, realisation) < 1e-6


def test_forty_resins_on_the_simplex():
    u = build(40, void=False, pure=True)
    w = u.forward(u.start(1.0, np.full(40, 1 / 40))).w
    np.testing.assert_allclose(w, 1 / 40, rtol=1e-12)
    u.sharpness = 16.0
    w = u.forward(np.random.default_rng(0).random(u.n)).w
    np.testing.assert_allclose(w.sum(0), 1.0, rtol=1e-12)
    assert np.isfinite(w).all()
    assert v_curve(u, 2, Realisation(), 0.45, 0.55) < 1e-6


def test_pure_resins_are_reached_and_their_order_does_not_matter():
    rng = np.random.default_rng(3)
    w = rng.dirichlet(np.ones(4), size=50).T
    sharp, _ = sharpen(w, 60.0, np.zeros(4))
    clear = np.sort(w, axis=0)[-1] > 1.3 * np.sort(w, axis=0)[-2]
    assert clear.sum() > 10
    np.testing.assert_allclose(sharp[:, clear], purest(w)[:, clear], atol=1e-5)
    np.testing.assert_allclose(sharpen(w[::-1], 9.0, np.zeros(4))[0], sharpen(w, 9.0, np.zeros(4))
                               [0][::-1], rtol=1e-12)  # fmt: skip
    same, _ = sharpen(w, 1.0, np.zeros(4))
    np.testing.assert_allclose(same, w, rtol=1e-12)


def test_a_bias_moves_the_border_between_two_resins_to_its_threshold():
    threshold = 0.7
    second = np.linspace(0.01, 0.99, 99)
    w = np.stack([1 - second, second])
    odds = np.log(threshold / (1 - threshold))
    sharp, _ = sharpen(w, 40.0, np.array([0.0, -odds]))
    assert second[np.argmax(sharp[1] > 0.5)] == pytest.approx(threshold, abs=0.011)


def test_extruded_repeated_and_zoned_designs_are_what_they_are_called():
    rng = np.random.default_rng(4)
    u = build(3, links={"group": groups(BOX, (), (2,), {})})
    u.sharpness = 4.0
    f = u.forward(rng.random(u.n))
    assert np.ptp(f.mu, axis=2).max() < 1e-9 * f.mu.max()
    assert np.ptp(f.mu) > 0
    assert u.n == 4 * 4 * (1 + 3)
    u = build(2, links={"group": groups(BOX, (2,), (), {2: 2}), "mirrors": (2,)})
    f = u.forward(rng.random(u.n))
    np.testing.assert_allclose(f.mu[:, :, :3], f.mu[:, :, 3:], rtol=1e-12)
    np.testing.assert_allclose(f.mu[:, :, :3], f.mu[:, :, 2::-1], rtol=1e-12)
    u = build(2, void=False, links={"zones": two_zones()})
    assert u.n == 2
    f = u.forward(np.array([0.25, 0.75]))
    assert np.all(f.w[1][:, :, :2] == 0.25)
    assert np.all(f.w[1][:, :, 2:] == 0.75)


def test_a_mask_spreads_over_voxels_that_are_alike():
    mask = np.zeros(SHAPE, bool)
    mask[1, 2, 0] = True
    column = spread(mask, BOX, groups(BOX, (), (2,), {}))
    assert column.sum() == SHAPE[2]
    assert column[1, 2].all()
    assert spread(mask, BOX, groups(BOX, (2,), (), {2: 2})).sum() == 4
    assert spread(mask, BOX, None) is mask


def test_links_that_contradict_are_refused():
    with pytest.raises(InputError, match="extruded and repeated along x"):
        groups(BOX, (), (2,), {2: 2})
    with pytest.raises(InputError, match="6 voxels long along x, which cannot be divided into 4"):
        groups(BOX, (), (), {2: 4})


def test_an_interface_is_as_wide_as_asked_for():
    width = 3.0
    u = build(2, void=False, width=width, pure=True)
    u.sharpness = 32.0
    x = np.zeros((*SHAPE,))
    x[:, :, 3:] = 1.0
    step = np.abs(np.diff(u.forward(x.reshape(-1)).w[1], axis=2)).max() / SPACING[0]
    plain = build(2, void=False, pure=True)
    plain.sharpness = 32.0
    sharp = np.abs(np.diff(plain.forward(x.reshape(-1)).w[1], axis=2)).max() / SPACING[0]
    assert sharp > 0.8
    # The steepest slope of a step under a cone filter of radius R is 1 / R (derived by hand);
    # near the shape's surface, where the cone is cut, it is more.
    assert step < 1.35 / width


def test_overhangs_vanish_and_what_stands_on_the_plate_stays():
    angle = SelfSupport(45.0, (1.0, 1.0, 1.0))
    assert len(angle.offsets) == 5  # the published neighbourhood at 45 degrees
    rho = np.zeros((5, 5, 7))
    rho[:, 2, 1] = 1.0  # a pillar
    rho[3, 2, 3:6] = 1.0  # a beam in the air
    rho[4, 2, 2] = 1.0  # a step out from the pillar, held at 45 degrees
    printed, _ = angle(rho)
    assert np.all(printed[:, 2, 1] > 0.97)
    assert printed[4, 2, 2] > 0.97
    assert np.all(printed[3, 2, 3:6] < 0.05)
    half, _ = angle(np.full((3, 3, 3), 0.5))
    np.testing.assert_allclose(half[1, 1, 1], 0.5, atol=0.01)


def test_a_self_support_angle_that_the_grid_cannot_hold_is_refused():
    with pytest.raises(InputError, match="can be at most 45 degrees"):
        SelfSupport(60.0, (1.0, 1.0, 1.0))


class CellDensity:
    """A kind of one's own: how dense a lattice inside each voxel is; G and K go with its square."""

    def __init__(self, shape):
        self.n = int(np.prod(shape))

    def start(self, rho, fractions):
        return np.full(self.n, 0.5)

    def make(self, x, draft: Draft):
        draft.memory["cell"] = 0.2 + 0.8 * x

    def stiffen(self, draft: Draft):
        scale = draft.memory["cell"] ** 2
        draft.memory["before"] = (draft.bulk, draft.shear)
        draft.bulk, draft.shear = draft.bulk * scale, draft.shear * scale

    def transpose(self, draft: Draft, slopes):
        cell, (bulk, shear) = draft.memory["cell"], draft.memory["before"]
        back = 2 * cell * (slopes["bulk"] * bulk + slopes["shear"] * shear)
        slopes["bulk"], slopes["shear"] = slopes["bulk"] * cell**2, slopes["shear"] * cell**2
        return 0.8 * back

    def weight(self, draft: Draft):
        return np.ones(self.n)


@pytest.mark.parametrize("void", [True, False])
def test_another_kind_of_unknown_is_one_class(void):
    u = build(3, void, extra=(CellDensity(SHAPE),))
    assert u.n == (96 if void else 0) + 96 + 3 * 96
    assert v_curve(u, 5, Realisation()) < 1e-6

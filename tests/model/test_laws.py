"""Blend laws: check values, bounds, slopes, and what may not change a blend."""

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.interpolate import PchipInterpolator

from voxelmat.errors import InputError
from voxelmat.model.curve import PairCurve, monotone
from voxelmat.model.laws import (
    LAWS,
    CalibratedCurve,
    HashinShtrikmanLower,
    HashinShtrikmanUpper,
    LogMix,
    Reuss,
    SelfConsistent,
    Voigt,
)

NAMES = ("p", "q", "r", "s")
CURVE = PairCurve(
    first="p",
    second="q",
    fraction=(0.0, 0.3, 0.6, 1.0),
    E=(1.0, 6.0, 200.0, 2000.0),
    E_low=(1.0, 3.0, 90.0, 2000.0),
    E_high=(1.0, 14.0, 500.0, 2000.0),
    nu=(0.49, 0.48, 0.42, 0.35),
)
BARE = [LogMix(clip=False), Voigt(clip=False), Reuss(clip=False)]
KEPT = [
    LogMix(),
    Voigt(),
    Reuss(),
    SelfConsistent(),
    HashinShtrikmanLower(),
    HashinShtrikmanUpper(),
    CalibratedCurve(curves=(CURVE,)),
    CalibratedCurve(curves=(CURVE,), side="low"),
]


def label(law):
    return f"{law.key}{getattr(law, 'side', '')[:3]}{'' if getattr(law, 'clip', 1) else '-bare'}"


each_law = pytest.mark.parametrize("law", KEPT, ids=label)
settle = settings(deadline=None, max_examples=20)


def moduli(E, nu):
    E, nu = np.asarray(E, float), np.asarray(nu, float)
    return E / (3.0 * (1.0 - 2.0 * nu)), E / (2.0 * (1.0 + nu))


@st.composite
def mixtures(draw, rows=6, least=0.0):
    """(fractions, bulk, shear) of 1 to 4 resins with a contrast of up to 1e4."""
    count = draw(st.integers(1, 4))
    E = draw(st.lists(st.floats(-0.5, 3.5), min_size=count, max_size=count))
    nu = draw(st.lists(st.floats(0.0, 0.4995), min_size=count, max_size=count))
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    w = rng.dirichlet(np.full(count, 0.7), rows)
    w = np.maximum(w, least)
    return (w / w.sum(axis=1, keepdims=True), *moduli(10.0 ** np.array(E), nu))


def evaluate(law, w, bulk, shear, names=NAMES):
    return law.evaluate(w, bulk, shear, resins=names[: len(bulk)])


# ---------------------------------------------------------------- check values
def test_hashin_shtrikman_bounds_of_a_hundredfold_contrast():
    # Hashin & Shtrikman 1963 evaluated (textbook formula): E 1 and 100, nu .3, vf .2.
    bulk, shear = moduli([1.0, 100.0], [0.3, 0.3])
    value = LogMix().evaluate([[0.8, 0.2]], bulk, shear)
    np.testing.assert_allclose(value.low_bulk, 1.1631, rtol=5e-5)
    np.testing.assert_allclose(value.high_bulk, 8.1135, rtol=5e-5)
    np.testing.assert_allclose(value.low_shear, 0.5813, rtol=5e-5)
    np.testing.assert_allclose(value.high_shear, 4.829, rtol=5e-5)


def test_porous_upper_bound():
    # Hashin & Shtrikman 1963 evaluated (textbook formula), nu .3: E+ at densities .1 to .5. A
    # near-void of 1e-9 stands for the void of the formula.
    rho = np.array([0.1, 0.2, 0.3, 0.5])
    bulk, shear = moduli([1e-9, 1.0], [0.3, 0.3])
    young = HashinShtrikmanUpper().evaluate(np.c_[1 - rho, rho], bulk, shear).young
    np.testing.assert_allclose(young, [0.05252, 0.11089, 0.17614, 0.33283], rtol=1e-4)


def test_half_and_half_of_rigid_and_soft():
    # Textbook formulas evaluated: rigid 2000 / soft .7 MPa, half each: 1.4, 2.4, 669, 1000 MPa,
    # here with nu .3 and .49.
    bulk, shear = moduli([0.7, 2000.0], [0.49, 0.3])
    laws = [Reuss(clip=False), HashinShtrikmanLower(), HashinShtrikmanUpper(), Voigt(clip=False)]
    young = [float(law.evaluate([[0.5, 0.5]], bulk, shear).young[0]) for law in laws]
    assert [round(young[0], 1), round(young[1], 1)] == [1.4, 2.4]
    assert round(young[2]) == 669
    np.testing.assert_allclose(young[3], 1000.0, rtol=2e-3)


@pytest.mark.parametrize(
    ("rigid", "low", "high", "consistent", "mixed"),
    [
        (0.1, 0.0012, 0.054, 0.0013, 0.0020),
        (0.3, 0.0019, 0.178, 0.0026, 0.0079),
        (0.5, 0.0031, 0.335, 0.032, 0.032),
        (0.7, 0.0058, 0.540, 0.401, 0.126),
        (0.9, 0.019, 0.819, 0.800, 0.501),
    ],
)
def test_contrast_of_a_thousand(rigid, low, high, consistent, mixed):
    # Textbook formulas evaluated with a separate code for contrast 1000, nu .35 in both phases,
    # given to two or three digits: half a unit of the last one.
    bulk, shear = moduli([1.0, 1000.0], [0.35, 0.35])
    for law, said in (
        (HashinShtrikmanLower(), low),
        (HashinShtrikmanUpper(), high),
        (SelfConsistent(), consistent),
        (LogMix(), mixed),
    ):
        young = law.evaluate([[1 - rigid, rigid]], bulk, shear).young[0] / 1000.0
        digit = 5e-5 if said < 0.01 else 5e-4
        assert abs(young - said) <= digit * (1 + 1e-9), law


def test_equal_shear_has_one_exact_bulk_modulus():
    # Hill 1963: with equal shear moduli 1/(K + 4G/3) = sum w/(K_m + 4G/3), whatever the pattern.
    w = np.array([[0.6, 0.4]])
    exact = 1.0 / (0.6 / (2.0 + 4.0 / 3.0) + 0.4 / (20.0 + 4.0 / 3.0)) - 4.0 / 3.0
    for law in (LogMix(), SelfConsistent(), HashinShtrikmanLower(), Voigt()):
        value = law.evaluate(w, [2.0, 20.0], [1.0, 1.0])
        np.testing.assert_allclose(value.bulk, exact, rtol=1e-12)
        assert value.shear == 1.0


def test_log_mixing_leaves_the_bound_and_is_brought_back():
    # 1 / .4995 with 2000 / .35: the bare law is 2 to 6 % above the upper bound of K from half
    # rigid upward (computed with a separate code).
    f = np.linspace(0.5, 0.95, 10)
    bulk, shear = moduli([1.0, 2000.0], [0.4995, 0.35])
    bare = LogMix(clip=False).evaluate(np.c_[1 - f, f], bulk, shear)
    over = bare.bulk / bare.high_bulk
    assert over.min() > 1.02
    assert 1.06 < over.max() < 1.065
    assert not bare.clipped.any()
    kept = LogMix().evaluate(np.c_[1 - f, f], bulk, shear)
    assert np.all(kept.bulk <= kept.high_bulk)
    assert np.all(kept.bulk >= 0.995 * kept.high_bulk)
    assert kept.clipped.all()
    np.testing.assert_array_equal(kept.shear, bare.shear)


# ---------------------------------------------------------------- properties
@each_law
@given(mix=mixtures())
@settle
def test_bounds_hold(law, mix):
    value = evaluate(law, *mix)
    for f in ("bulk", "shear"):
        low, high = getattr(value, f"low_{f}"), getattr(value, f"high_{f}")
        assert np.all(low <= high)
        assert np.all(getattr(value, f) >= low)
        assert np.all(getattr(value, f) <= high)


@given(mix=mixtures())
@settle
def test_laws_are_in_their_known_order(mix):
    parts = [
        law.evaluate(*mix)
        for law in (Reuss(clip=False), HashinShtrikmanLower(), SelfConsistent(),
                    HashinShtrikmanUpper(), Voigt(clip=False))
    ]  # fmt: skip
    for below, above in pairwise(parts):
        assert np.all(below.bulk <= above.bulk * (1 + 1e-12))
        assert np.all(below.shear <= above.shear * (1 + 1e-12))


@pytest.mark.parametrize("law", KEPT + BARE, ids=label)
@given(mix=mixtures(least=0.02))
@settle
def test_slopes_against_central_differences(law, mix):
    w, bulk, shear = mix
    count = len(bulk)
    value = evaluate(law, w, bulk, shear)
    best = np.full((2, *w.shape), np.inf)
    for step in (1e-3, 1e-4, 1e-5, 1e-6):
        for m in range(count):
            h = np.zeros_like(w)
            h[:, m] = step * w[:, m]
            up, down = evaluate(law, w + h, bulk, shear), evaluate(law, w - h, bulk, shear)
            for row, f in enumerate(("bulk", "shear")):
                slope = getattr(value, f"d_{f}")
                # Slopes under 1 % of the modulus a unit fraction are judged against that.
                scale = np.maximum(np.abs(slope).max(axis=1), 1e-2 * getattr(value, f))
                rise = (getattr(up, f) - getattr(down, f)) / (2 * h[:, m])
                error = np.abs(rise - slope[:, m]) / scale
                best[row, :, m] = np.minimum(best[row, :, m], error)
    assert best.max() < 1e-6
    np.testing.assert_allclose((w * value.d_bulk).sum(axis=1) / value.bulk, 0, atol=1e-9)


@each_law
@given(mix=mixtures(), data=st.data())
@settle
def test_pure_resins_are_exact(law, mix, data):
    _, bulk, shear = mix
    value = evaluate(law, np.eye(len(bulk)), bulk, shear)
    np.testing.assert_array_equal(value.bulk, bulk)
    np.testing.assert_array_equal(value.shear, shear)
    assert not value.clipped.any()


@each_law
@given(mix=mixtures())
@settle
def test_slopes_at_pure_resins_point_towards_the_others(law, mix):
    _, bulk, shear = mix
    count = len(bulk)
    at = evaluate(law, np.eye(count), bulk, shear)
    step = 1e-5 * min(bulk.min(), shear.min()) / max(bulk.max(), shear.max())
    for a in range(count):
        for b in set(range(count)) - {a}:
            w = np.zeros((1, count))
            w[0, a], w[0, b] = 1 - step, step
            near = evaluate(law, w, bulk, shear)
            for f, x in (("bulk", bulk), ("shear", shear)):
                rise = (getattr(near, f)[0] - x[a]) / step
                slope = getattr(at, f"d_{f}")[a]
                # Moduli are good to 1e-13 (an iterated law), which the step blows up.
                noise = 1e-13 * x[a] / step
                assert abs(rise - (slope[b] - slope[a])) <= 1e-4 * abs(rise) + noise


@each_law
@given(mix=mixtures(), data=st.data())
@settle
def test_order_of_resins_changes_nothing(law, mix, data):
    w, bulk, shear = mix
    order = data.draw(st.permutations(range(len(bulk))))
    names = [NAMES[m] for m in order]
    a = evaluate(law, w, bulk, shear)
    b = evaluate(law, w[:, order], bulk[order], shear[order], names)
    for f in ("bulk", "shear"):
        np.testing.assert_allclose(getattr(a, f), getattr(b, f), rtol=1e-12)
        scale = np.abs(getattr(a, f"d_{f}")).max() + 1e-3 * getattr(a, f).max()
        ours, theirs = getattr(a, f"d_{f}")[:, order] / scale, getattr(b, f"d_{f}") / scale
        np.testing.assert_allclose(ours, theirs, atol=1e-9)


@each_law
@given(mix=mixtures())
@settle
def test_a_resin_that_is_not_there_changes_nothing(law, mix):
    w, bulk, shear = mix
    a = evaluate(law, w, bulk, shear)
    wide = np.c_[w, np.zeros(len(w))]
    names = (*NAMES[: len(bulk)], "unused")
    b = evaluate(law, wide, np.r_[bulk, 1e-3], np.r_[shear, 1e-3], names)
    for f in ("bulk", "shear", "low_bulk", "high_shear"):
        np.testing.assert_allclose(getattr(a, f), getattr(b, f), rtol=1e-12)


@each_law
@given(count=st.integers(1, 4), seed=st.integers(0, 99))
@settle
def test_identical_resins_give_the_resin(law, count, seed):
    bulk, shear = moduli([3.7], [0.45])
    w = np.random.default_rng(seed).dirichlet(np.ones(count), 5)
    value = evaluate(law, w, np.repeat(bulk, count), np.repeat(shear, count))
    assert np.all(value.bulk == bulk)
    assert np.all(value.shear == shear)
    np.testing.assert_allclose(value.d_bulk, 0, atol=1e-12)
    assert not value.clipped.any()


# ---------------------------------------------------------------- calibrated curves
def test_a_curve_goes_through_its_knots():
    bulk, shear = moduli([1.0, 2000.0], [0.49, 0.35])
    f = np.array(CURVE.fraction)
    for side, said in (("value", CURVE.E), ("low", CURVE.E_low), ("high", CURVE.E_high)):
        law = CalibratedCurve(curves=(CURVE,), clip=False, side=side)
        value = law.evaluate(np.c_[1 - f, f], bulk, shear, resins=("p", "q"))
        np.testing.assert_allclose(value.young, said, rtol=1e-12)
        assert not value.uncalibrated.any()
    middle = CalibratedCurve(curves=(CURVE,), clip=False)
    value = middle.evaluate(np.c_[1 - f, f], bulk, shear, resins=("p", "q"))
    np.testing.assert_allclose(value.poisson, CURVE.nu, rtol=1e-12)
    # The edges of the band keep the bulk modulus of the curve.
    low = CalibratedCurve(curves=(CURVE,), clip=False, side="low")
    kept = low.evaluate(np.c_[1 - f, f], bulk, shear, resins=("p", "q"))
    np.testing.assert_allclose(kept.bulk, value.bulk, rtol=1e-12)


def test_a_curve_rises_all_the_way_and_knows_its_resins_in_either_order():
    bulk, shear = moduli([2000.0, 1.3], [0.35, 0.49])
    f = np.linspace(0, 1, 101)
    law = CalibratedCurve(curves=(CURVE,))
    value = law.evaluate(np.c_[f, 1 - f], bulk, shear, resins=("q", "p"))
    assert np.all(np.diff(value.young) > 0)
    assert value.young[[0, -1]] == pytest.approx([1.3, 2000.0], rel=1e-14)


def test_blends_without_a_curve_mix_logarithms_and_say_so():
    bulk, shear = moduli([1.0, 2000.0, 30.0], [0.49, 0.35, 0.45])
    w = np.array([[0.5, 0.5, 0.0], [0.5, 0.0, 0.5], [0.0, 0.3, 0.7], [0.4, 0.3, 0.3], [0, 0, 1]])
    law = CalibratedCurve(curves=(CURVE,))
    value = law.evaluate(w, bulk, shear, resins=("p", "q", "r"))
    assert value.uncalibrated.tolist() == [False, True, True, True, False]
    mixed = LogMix().evaluate(w, bulk, shear)
    np.testing.assert_allclose(value.shear[[1, 2]], mixed.shear[[1, 2]], rtol=1e-13)
    np.testing.assert_allclose(value.bulk[[1, 2]], mixed.bulk[[1, 2]], rtol=1e-13)
    assert value.shear[0] != pytest.approx(mixed.shear[0], rel=0.1)


def test_monotone_curve_against_scipy():
    # An independent general-purpose library: scipy.interpolate.PchipInterpolator.
    x, y = (0.0, 0.2, 0.25, 0.7, 1.0), (0.0, 0.1, 0.5, 0.52, 2.0)
    t = np.linspace(0, 1, 301)
    ours, slope = monotone(x, y, t)
    theirs = PchipInterpolator(x, y)
    np.testing.assert_allclose(ours, theirs(t), atol=1e-13)
    np.testing.assert_allclose(slope, theirs(t, 1), atol=1e-11)
    assert np.all(np.diff(ours) >= 0)


@pytest.mark.parametrize(
    ("change", "key"),
    [
        ({"fraction": (0.0, 0.6, 0.3, 1.0)}, "fraction"),
        ({"fraction": (0.1, 0.3, 0.6, 1.0)}, "fraction"),
        ({"E": (1.0, 6.0, 5.0, 2000.0)}, "E_MPa"),
        ({"E": (1.0, -6.0, 200.0, 2000.0)}, "E_MPa"),
        ({"E": (1.0, float("nan"), 200.0, 2000.0)}, "E_MPa"),
        ({"E_low": (1.0, 7.0, 90.0, 2000.0)}, "low"),
        ({"E_low": (0.5, 3.0, 90.0, 2000.0)}, "low"),
        ({"nu": (0.49, 0.5, 0.42, 0.35)}, "nu"),
        ({"second": "p"}, None),
    ],
)
def test_bad_curves_are_refused(change, key):
    fields = {f: getattr(CURVE, f) for f in CURVE.__dataclass_fields__}
    with pytest.raises(InputError) as caught:
        PairCurve(**(fields | change))
    assert caught.value.key == key


# ---------------------------------------------------------------- bad input
@pytest.mark.parametrize(
    ("fractions", "bulk"),
    [
        ([[0.5, 0.6]], [1.0, 2.0]),
        ([[1.2, -0.2]], [1.0, 2.0]),
        ([[np.nan, 1.0]], [1.0, 2.0]),
        ([[0.5, 0.5]], [1.0, -2.0]),
        ([[0.5, 0.5]], [1.0, np.nan]),
        ([[0.5, 0.5]], [1.0]),
        ([0.5, 0.5], [1.0, 2.0]),
    ],
)
def test_bad_input_is_refused(fractions, bulk):
    with pytest.raises(InputError):
        LogMix().evaluate(fractions, bulk, np.full(len(bulk), 1.0))


def test_a_calibrated_law_needs_names_and_one_curve_a_pair():
    with pytest.raises(InputError, match="names"):
        CalibratedCurve(curves=(CURVE,)).evaluate([[1.0]], [1.0], [1.0])
    with pytest.raises(InputError, match="one blend curve"):
        CalibratedCurve(curves=(CURVE, CURVE))
    with pytest.raises(InputError, match="side"):
        CalibratedCurve(curves=(CURVE,), side="middle")


def test_no_blends_at_all():
    for law in LAWS.values():
        value = law().evaluate(np.empty((0, 2)), [1.0, 2.0], [1.0, 2.0], resins=("a", "b"))
        assert value.bulk.shape == (0,)
        assert value.d_bulk.shape == (0, 2)


def test_blocks_do_not_show():
    rng = np.random.default_rng(5)
    w = rng.dirichlet([1.0, 1.0], 20000)
    bulk, shear = moduli([1.0, 2000.0], [0.49, 0.35])
    value = LogMix().evaluate(w, bulk, shear)
    part = LogMix().evaluate(w[8190:8200], bulk, shear)
    np.testing.assert_allclose(value.bulk[8190:8200], part.bulk, rtol=1e-14)
    np.testing.assert_allclose(value.d_shear[8190:8200], part.d_shear, rtol=1e-12)

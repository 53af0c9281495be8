"""Computed blends: the cell is the printer's dither, exact relations hold within what is said."""

import numpy as np
import pytest

from voxelmat.errors import InputError
from voxelmat.model.blend import Blend
from voxelmat.model.material import Constant, Material
from voxelmat.printing.blend_cell import dither_cell, homogenise_blend


def resin(name, bulk, shear):
    """An invented resin of given moduli."""
    return Material(
        name=name,
        kind="rigid",
        E=Constant(value=9 * bulk * shear / (3 * bulk + shear)),
        nu=Constant(value=(3 * bulk - 2 * shear) / (2 * (3 * bulk + shear))),
        density=Constant(value=1e-9),
    )


SOFT, STIFF = resin("soft-example", 2.0, 1.0), resin("stiff-example", 20.0, 1.0)


@pytest.fixture(scope="module")
def half():
    return homogenise_blend((SOFT, STIFF), {SOFT.name: 1, STIFF.name: 1}, refinements=(1, 2, 3))


def test_cell_holds_the_fractions_spread_evenly():
    fractions = {SOFT.name: 0.7, STIFF.name: 0.3}
    part = dither_cell((SOFT, STIFF), fractions, spacing=(0.04, 0.08, 0.03))
    assert part.grid.shape == (16, 16, 16)
    assert part.grid.spacing == (0.04, 0.08, 0.03)
    stiff = part.labels == 2
    assert stiff.mean() == pytest.approx(0.3, abs=1 / 4096)
    # Blue noise: means over blocks of 4^3 scatter less than half as much as white noise.
    blocks = stiff.reshape(4, 4, 4, 4, 4, 4).mean(axis=(1, 3, 5))
    assert blocks.std() < np.sqrt(0.3 * 0.7 / 64) / 2
    other = dither_cell((SOFT, STIFF), fractions, seed=2)
    assert not np.array_equal(other.labels, part.labels)


def test_three_resins_and_order_of_channels():
    third = resin("third-example", 5.0, 2.0)
    blend = Blend.of({SOFT.name: 0.5, STIFF.name: 0.2, third.name: 0.3})
    part = dither_cell((third, STIFF, SOFT, resin("unused-example", 1, 1)), blend)
    assert [m.name for m in part.resins] == [third.name, STIFF.name, SOFT.name]
    share = np.bincount(part.labels.ravel(order="F"), minlength=4) / 4096
    assert share == pytest.approx([0, 0.3, 0.2, 0.5], abs=1 / 2048)


def test_one_element_a_droplet_is_too_stiff(half):
    """Hill 1963 is exact for equal shear moduli, any geometry; the bounds meet there.

    One hex8 a droplet overshoots by +42 % (full) and +19 % (B-bar) in the checks' own dither at
    bulk contrast 10; refinement brings it down.
    """
    f = half.placed.fraction(STIFF.name)
    exact = 1 / (f / (20 + 4 / 3) + (1 - f) / (2 + 4 / 3)) - 4 / 3
    assert half.bulk_range == pytest.approx((exact, exact), rel=1e-12)
    over = np.array(half.bulk) / exact - 1
    assert over[0] > 0.19
    assert np.all(np.diff(over) < 0)
    assert over[-1] < 0.04
    assert half.raw_held == (False, False, False)
    assert abs(half.bulk_limit.value - exact) <= half.bulk_limit.uncertainty
    assert half.bulk_limit.uncertainty < 0.1 * exact
    assert half.shear == pytest.approx([1.0] * 3, rel=1e-9)


def test_gate_and_what_is_said(half):
    assert half.held
    assert half.moduli == pytest.approx((half.bulk_range[0], 1.0), rel=1e-9)
    k, g = half.moduli
    assert half.young == pytest.approx(9 * k * g / (3 * k + g))
    assert half.poisson == pytest.approx((3 * k - 2 * g) / (6 * k + 2 * g))
    assert any("At refinement 1, 2, 3" in c and "too stiff" in c for c in half.cautions)
    assert any("coupons decide" in c for c in half.cautions)
    page = half._repr_html_()
    for words in ("MPa", "extrapolated", "±", "outside", "within", "upper bound"):
        assert words in page
    wrong = half.replace(bulk_range=(0.1, 0.5 * half.bulk_range[0]))
    assert not wrong.held
    with pytest.raises(InputError, match="no answer"):
        _ = wrong.young


def test_pure_resin_is_itself():
    found = homogenise_blend((SOFT,), {SOFT.name: 1.0}, refinements=(1, 2))
    assert found.bulk_limit.value == pytest.approx(2.0, rel=1e-9)
    assert found.held
    assert found.raw_held == (True, True)


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"fractions": {"gone-example": 1.0}}, "gone-example"),
        ({"refinements": (2,)}, "two or more"),
        ({"refinements": (2, 1)}, "rising"),
        ({"refinements": (1, 16)}, "256 elements"),
        ({"cell": 18}, "multiple of 4"),
    ],
)
def test_bad_blends(change, words):
    given = {"fractions": {SOFT.name: 1, STIFF.name: 1}, **change}
    with pytest.raises(InputError, match=words):
        homogenise_blend((SOFT, STIFF), **given)


@pytest.mark.slow
def test_finer_meshes_stay_within_the_uncertainty():
    """At contrast 1000 the limit from 2, 3, 4 elements a droplet holds that from 2, 3, 4, 6."""
    soft, stiff = resin("soft-example", 1.111, 0.3704), resin("stiff-example", 1111.0, 370.4)
    blend = {soft.name: 0.5, stiff.name: 0.5}
    coarse = homogenise_blend((soft, stiff), blend, refinements=(1, 2, 3, 4))
    fine = homogenise_blend((soft, stiff), blend, refinements=(2, 3, 4, 6))
    for name in ("bulk_limit", "shear_limit"):
        a, b = getattr(coarse, name), getattr(fine, name)
        assert abs(a.value - b.value) <= a.uncertainty
        assert b.uncertainty < a.uncertainty
    assert coarse.held
    assert fine.held

"""Shore A to modulus and back."""

import math

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.material.hardness import (
    modulus_by_gent,
    modulus_by_log,
    modulus_from_shore_a,
    shore_a_from_modulus,
)


@pytest.mark.parametrize(
    ("shore", "modulus"),
    [
        (20, 0.7319),
        (30, 1.1424),
        (40, 1.6896),
        (50, 2.4558),
        (60, 3.6051),
        (70, 5.5205),
        (80, 9.3514),
    ],
)
def test_gents_relation(shore, modulus):
    # Gent 1958 (Rubber Chem. Technol. 31:896); the constants are from memory.
    assert modulus_by_gent(shore) == pytest.approx(modulus, abs=5e-5)


def test_the_logarithm_is_to_base_ten():
    # log10 E = 0.0235 S - 0.6403 (from memory): Shore 80 is 17.4 MPa; with base e it would
    # be 3.5, a known mistake. The two relations differ about 1.9 times there.
    assert modulus_by_log(80.0) == pytest.approx(17.4, abs=0.05)
    assert modulus_by_log(80.0) / modulus_by_gent(80.0) == pytest.approx(1.9, abs=0.05)


@given(st.floats(1.0, 99.0))
@settings(deadline=None, max_examples=25)
def test_the_band_holds_both_relations_and_the_way_back(shore):
    band = modulus_from_shore_a(shore)
    assert band.low <= min(band.gent, band.log)
    assert band.high >= max(band.gent, band.log)
    assert band.in_range == (20.0 <= shore <= 80.0)
    back = shore_a_from_modulus(band.log) if band.log > 0.32 else None
    if back is not None:
        assert back.log == pytest.approx(shore, abs=1e-9)
        assert back.low - 1e-9 <= shore <= back.high + 1e-9
        assert modulus_by_gent(back.gent) == pytest.approx(band.log, rel=1e-9)


@pytest.mark.parametrize("shore", [0.0, 100.0, -5.0, math.nan, math.inf])
def test_no_such_hardness(shore):
    with pytest.raises(InputError, match="Shore A"):
        modulus_from_shore_a(shore)


@pytest.mark.parametrize("modulus", [0.0, -1.0, math.nan, math.inf, 0.01, 3000.0])
def test_no_hardness_for_this_modulus(modulus):
    with pytest.raises(InputError):
        shore_a_from_modulus(modulus)

"""Verdicts: met, not met, or cannot be said, and the margin."""

from __future__ import annotations

import math

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.model.requirement import MEASURES, Requirement, judge

VALUE = st.floats(-100, 100)


def most(limit=10.0, **more):
    return Requirement(name="r", measure="displacement", at_most=limit, **more)


@pytest.mark.parametrize(
    ("value", "band", "doubts", "status"),
    [
        (9.0, None, (), "met"),
        (10.0, None, (), "met"),
        (10.1, None, (), "not met"),
        (9.0, (8.0, 9.9), (), "met"),
        (9.0, (8.0, 11.0), (), "cannot be said"),
        (11.0, (9.0, 12.0), (), "cannot be said"),
        (11.0, (10.5, 12.0), (), "not met"),
        (9.0, None, ("indicative",), "cannot be said"),
        (11.0, None, ("indicative",), "cannot be said"),
        (math.nan, None, (), "cannot be said"),
        (9.0, (math.nan, 10.0), (), "cannot be said"),
        (math.inf, None, (), "cannot be said"),
    ],
)
def test_three_states(value, band, doubts, status):
    verdict = judge(most(), value, band, doubts)
    assert verdict.status == status
    assert bool(verdict.reasons) == (status == "cannot be said")


@settings(deadline=None, max_examples=50)
@given(value=VALUE, spread=st.tuples(VALUE, VALUE), limits=st.tuples(VALUE, VALUE))
def test_against_plain_comparisons(value, spread, limits):
    low, high = sorted(limits)
    requirement = most(high, at_least=low)
    verdict = judge(requirement, value, spread)
    ends = [value, *spread]
    # Rounding must not carry a point past the end of the band.
    tried = [min(max(ends), min(ends) + t / 200 * (max(ends) - min(ends))) for t in range(201)]
    fits = {low <= v <= high for v in (*tried, *ends)}
    if fits == {True}:
        assert verdict.status == "met"
    elif fits == {True, False}:
        assert verdict.status == "cannot be said"
        assert "straddles" in verdict.reasons[0]
    elif min(ends) > high or max(ends) < low:
        assert verdict.status == "not met"
    assert (verdict.margin >= 0) == (low <= value <= high)
    assert verdict.low <= value <= verdict.high


def test_a_band_that_jumps_over_the_whole_range_is_not_met_by_luck():
    """Below at one end and above at the other: some value between may fit."""
    verdict = judge(most(10.0, at_least=9.0), 20.0, (1.0, 30.0))
    assert verdict.status == "cannot be said"


def test_margin_is_relative_to_the_limit():
    assert judge(most(10.0), 8.0).margin == pytest.approx(0.2)
    assert judge(most(-2.0), -3.0).margin == pytest.approx(0.5)
    assert judge(most(10.0, at_least=7.9), 8.0).margin == pytest.approx(0.1 / 7.9)
    assert judge(most(0.0), -3.0).margin == pytest.approx(3.0)


def test_units():
    for measure, unit in MEASURES.items():
        assert Requirement(name="r", measure=measure, at_most=1.0).unit == unit


@pytest.mark.parametrize(
    "change",
    [
        {"measure": "height"},
        {"at_most": None},
        {"at_most": math.nan},
        {"at_most": math.inf},
        {"at_least": 11.0},
        {"component": "w"},
        {"reduce": "sum"},
    ],
)
def test_refused(change):
    with pytest.raises(InputError):
        Requirement(**{"name": "r", "measure": "displacement", "at_most": 10.0, **change})

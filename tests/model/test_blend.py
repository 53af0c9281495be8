"""Blends: fractions that sum to 1, in one order, and nothing else."""

from __future__ import annotations

import math

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.model.blend import EMPTY, Blend

PARTS = st.dictionaries(st.sampled_from("abcdef"), st.floats(0, 1e6), min_size=1).filter(
    lambda d: sum(d.values()) > 1e-3
)


@settings(deadline=None, max_examples=25)
@given(parts=PARTS, scale=st.floats(0.01, 100))
def test_parts_by_volume(parts, scale):
    blend = Blend.of(parts)
    total = math.fsum(parts.values())
    assert math.fsum(f for _, f in blend.fractions) == pytest.approx(1, abs=1e-12)
    for name, part in parts.items():
        assert blend.fraction(name) == pytest.approx(part / total, abs=1e-12)
    assert [n for n, _ in blend.fractions] == sorted(n for n, v in parts.items() if v / total > 0)
    other = Blend.of({n: v * scale for n, v in reversed(parts.items())})
    for name in parts:
        assert other.fraction(name) == pytest.approx(blend.fraction(name), abs=1e-12)


@settings(deadline=None, max_examples=25)
@given(parts=PARTS)
def test_equal_and_hashable_by_content(parts):
    blend = Blend.of(parts)
    again = Blend(blend.fractions)
    assert blend == again
    assert {blend: 1}[again] == 1


def test_pure_and_empty():
    assert Blend.of({"a": 2.0, "b": 0.0}) == Blend.pure("a")
    assert Blend.pure("a").is_pure
    assert EMPTY.is_empty
    assert not EMPTY.is_pure
    assert Blend.pure("a").fraction("b") == 0.0
    assert str(Blend.of({"soft": 3, "rigid": 1})) == "25 % rigid + 75 % soft"
    assert str(EMPTY) == "empty"


@pytest.mark.parametrize(
    "parts", [{}, {"a": -1.0, "b": 2.0}, {"a": math.nan}, {"a": math.inf}, {"a": 0.0}]
)
def test_bad_parts(parts):
    with pytest.raises(InputError):
        Blend.of(parts)


@pytest.mark.parametrize(
    "fractions",
    [
        (("a", 0.5),),
        (("a", 0.5), ("b", 0.6)),
        (("b", 0.5), ("a", 0.5)),
        (("a", 0.5), ("a", 0.5)),
        (("a", 0.0), ("b", 1.0)),
        (("a", math.nan),),
    ],
)
def test_bad_fractions(fractions):
    with pytest.raises(InputError):
        Blend(fractions)

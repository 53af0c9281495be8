"""Loads and supports: what is refused, and where each cell of a pressure map lies."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.model.loadcase import (
    BodyForce,
    Force,
    GroundSpring,
    LoadCase,
    Pressure,
    PressureMap,
    Support,
)
from voxelmat.model.region import Box, parse_side

EVERYWHERE = Box(name="all", low=(-1e9,) * 3, high=(1e9,) * 3)


@st.composite
def maps(draw):
    axis, column, row = draw(st.permutations("xyz"))
    sign = st.sampled_from("+-")
    shape = draw(st.tuples(st.integers(1, 4), st.integers(1, 5)))
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    return PressureMap(
        region=EVERYWHERE,
        values=rng.uniform(0, 1, shape) + 0.01,
        cell=draw(st.tuples(st.floats(0.5, 5), st.floats(0.5, 5))),
        side=axis + draw(sign),
        first_cell=draw(st.tuples(st.floats(-9, 9), st.floats(-9, 9))),
        column_direction=column + draw(sign),
        row_direction=row + draw(sign),
    )


def centre_of_cell(load, row, column):
    """Where a cell's centre lies, in plain Python; the side's axis at 0."""
    axis, _ = parse_side(load.side, "m")
    point = [0.0, 0.0, 0.0]
    for a, first in zip([a for a in range(3) if a != axis], load.first_cell, strict=True):
        point[a] = first
    for direction, number, step in (
        (load.column_direction, column, load.cell[0]),
        (load.row_direction, row, load.cell[1]),
    ):
        a, sense = parse_side(direction, "m")
        point[a] += sense * number * step
    return point


@settings(deadline=None, max_examples=25)
@given(load=maps(), along=st.floats(-50, 50), off=st.tuples(*[st.floats(-0.49, 0.49)] * 2))
def test_each_cell_is_found_where_it_lies(load, along, off):
    axis, _ = parse_side(load.side, "m")
    others = [a for a in range(3) if a != axis]
    column_axis, _ = parse_side(load.column_direction, "m")
    total, moment = 0.0, np.zeros(2)
    for (row, column), value in np.ndenumerate(load.values):
        point = centre_of_cell(load, row, column)
        centre = np.array([point[a] for a in others])
        point[axis] = along
        for a, share in zip(others, off, strict=True):
            point[a] += share * load.cell[0 if a == column_axis else 1]
        assert load.at(np.array([point]))[0] == value
        found = load.cell_of(np.array([point]))
        assert (found[0][0], found[1][0]) == (row, column)
        total += value
        moment += value * centre
    assert load.resultant == pytest.approx(total * load.cell[0] * load.cell[1], rel=1e-12)
    np.testing.assert_allclose(load.centre, moment / total, atol=1e-9)


@settings(deadline=None, max_examples=25)
@given(load=maps())
def test_nothing_presses_beside_the_map(load):
    rows, columns = load.values.shape
    for row, column in ((-1, 0), (rows, 0), (0, -1), (0, columns)):
        assert load.at(np.array([centre_of_cell(load, row, column)]))[0] == 0.0


@settings(deadline=None, max_examples=25)
@given(load=maps())
def test_turned_directions_mirror_the_map(load):
    """Growing the other way from the other end is the same map read backwards."""
    flip = {"+": "-", "-": "+"}
    rows, columns = load.values.shape
    axis, _ = parse_side(load.side, "m")
    last = centre_of_cell(load, rows - 1, columns - 1)
    turned = PressureMap(
        region=EVERYWHERE,
        values=load.values[::-1, ::-1],
        cell=load.cell,
        side=load.side,
        first_cell=tuple(last[a] for a in range(3) if a != axis),
        column_direction=load.column_direction[0] + flip[load.column_direction[1]],
        row_direction=load.row_direction[0] + flip[load.row_direction[1]],
    )
    np.testing.assert_allclose(turned.centre, load.centre, atol=1e-9)
    for (row, column), value in np.ndenumerate(load.values):
        assert turned.at(np.array([centre_of_cell(load, row, column)]))[0] == value


def a_map(**change):
    return PressureMap(
        **{
            "region": EVERYWHERE,
            "values": np.ones((2, 3)),
            "cell": (1.0, 1.0),
            "side": "z+",
            "first_cell": (0.0, 0.0),
            "column_direction": "x+",
            "row_direction": "y-",
            **change,
        }
    )


@pytest.mark.parametrize(
    ("make", "said"),
    [
        (lambda: a_map(values=[[1.0, math.nan]]), "row 1, column 2"),
        (lambda: a_map(values=[[1.0], [math.inf]]), "row 2, column 1"),
        (lambda: a_map(values=[[1.0], [-0.1]]), "negative pressure at row 2, column 1"),
        (lambda: a_map(values=[1.0, 2.0]), "not a table"),
        (lambda: a_map(values=np.ones((0, 2))), "not a table"),
        (lambda: a_map(cell=(0.0, 1.0)), "above 0 mm"),
        (lambda: a_map(cell=(1.0, math.nan)), "above 0 mm"),
        (lambda: a_map(column_direction="y+"), "three different axes"),
        (lambda: a_map(side="x+"), "three different axes"),
        (lambda: a_map(row_direction="down"), "x-, x"),
        (lambda: Force(region=EVERYWHERE, vector=(0, 0, math.nan)), "must be finite"),
        (lambda: Pressure(region=EVERYWHERE, pressure=math.inf), "must be finite"),
        (lambda: BodyForce(acceleration=(math.nan, 0, 0)), "must be finite"),
        (lambda: GroundSpring(region=EVERYWHERE, stiffness=(0, 0, 0)), "one above 0"),
        (lambda: GroundSpring(region=EVERYWHERE, stiffness=(0, -1, 1)), "stiffness >= 0"),
        (lambda: Support(region=EVERYWHERE, displacement=(None, None, None)), "no direction"),
        (lambda: Support(region=EVERYWHERE, displacement=(None, math.nan, 0)), "must be finite"),
        (lambda: LoadCase(name="c", duration_s=0.0), "duration > 0"),
        (lambda: LoadCase(name="c", cycles=0), "cycles >= 1"),
        (lambda: LoadCase(name="c", weight=-1.0), "weight > 0"),
        (lambda: LoadCase(name="c", temperature_degC=math.nan), "must be finite"),
    ],
)
def test_refused(make, said):
    with pytest.raises(InputError, match=said):
        make()


def test_values_are_copied_and_read_only():
    source = np.ones((2, 2))
    load = a_map(values=source)
    source[:] = 5
    assert load.values.max() == 1.0
    assert not load.values.flags.writeable

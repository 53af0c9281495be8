"""Maps laid on a part: what arrives of a pressure map, whether it lies mirrored, and targets."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.loads import nodal_load
from voxelmat.model.loadcase import PressureMap
from voxelmat.model.part import Part
from voxelmat.model.region import parse_side
from voxelmat.units import number

__all__ = ["LaidMap", "check_laid", "lay_on", "sample"]

Floats = NDArray[np.float64]

#: Beyond this a difference between forces is pointed out; ours.
_CAUTION = 0.05
#: Beyond this the run stops, unless the design says otherwise; ours.
_STOP = 0.20
#: A centre that is off by less than this part of a cell is where it was expected; ours.
_NEAR = 0.25


@dataclass(frozen=True, slots=True, kw_only=True)
class LaidMap:
    """What of a pressure map arrives on a part.

    Attributes
    ----------
    force : float
        Along the map's side, into the part, N.
    centre : tuple of float
        Centre of pressure in the two axes other than the side's, in order, mm.
    map_force, map_centre
        The same of the map itself, wherever the part is.
    """

    force: float
    centre: tuple[float, float]
    map_force: float
    map_centre: tuple[float, float]


def lay_on(part: Part, load: PressureMap) -> LaidMap:
    """Lay a map on a part as the solver does.

    Raises
    ------
    InputError
        If nothing of it lands on the part.
    """
    nodal = nodal_load(part, load, f"pressure map '{load.source_file}' on '{load.region.name}'")
    axis, side = parse_side(load.side, load.region.name)
    pressed = -side * nodal.force[:, axis]
    total = float(math.fsum(pressed))
    if not total > 0:
        raise InputError(
            f"The pressure map '{load.source_file}' presses with nothing on '{load.region.name}'."
        )
    nx, ny, _ = part.grid.node_shape
    index = (nodal.node % nx, nodal.node // nx % ny, nodal.node // (nx * ny))
    u, v = (
        float((part.grid.nodes()[a][index[a]] * pressed).sum() / total)
        for a in range(3)
        if a != axis
    )
    return LaidMap(force=total, centre=(u, v), map_force=load.resultant, map_centre=load.centre)


def check_laid(
    part: Part,
    load: PressureMap,
    *,
    expected_centre: tuple[float, float] | None = None,
    within: float = _STOP,
) -> tuple[LaidMap, str, tuple[str, ...]]:
    """Lay a map on a part and compare force and centre with what was expected.

    The solver itself points out where more than 5 % of a map misses the part, or where the
    force on the part is not the expected one.

    Parameters
    ----------
    part : Part
    load : PressureMap
    expected_centre : tuple of float, optional
        In the two axes other than the side's, in order, mm.
    within : float
        Fraction by which forces may differ.

    Returns
    -------
    laid : LaidMap
    note : str
        What arrived, in words.
    cautions : tuple of str

    Raises
    ------
    InputError
        If nothing arrives, if a force differs by more than `within`, or if the map fits its
        expected centre much better when it is mirrored.
    """
    laid = lay_on(part, load)
    _check_force(load, laid, within)
    cautions: list[str] = []
    expected = load.expected_force
    if expected is not None and abs(laid.map_force - expected) > _CAUTION * expected:
        cautions.append(
            f"{_title(load)} adds up to {number(laid.map_force)} N; {number(expected)} N were "
            "expected."
        )
    if expected_centre is not None:
        cautions += _check_centre(part, load, laid, expected_centre)
    axes = _axis_names(load)
    note = (
        f"{_title(load)} adds up to {number(laid.map_force)} N with its centre at "
        f"{_place(laid.map_centre, axes)}; {number(laid.force)} N of it press on "
        f"'{load.region.name}', centre at {_place(laid.centre, axes)}."
    )
    return laid, note, tuple(cautions)


def _title(load: PressureMap) -> str:
    return f"Pressure map '{load.source_file}'"


def _axis_names(load: PressureMap) -> str:
    return "xyz".replace(load.side[0], "")


def _place(point: tuple[float, float], axes: str) -> str:
    return f"{axes[0]} = {number(point[0])}, {axes[1]} = {number(point[1])} mm"


def _check_force(load: PressureMap, laid: LaidMap, within: float) -> None:
    if abs(laid.force - laid.map_force) > within * laid.map_force:
        raise InputError(
            f"{_title(load)} adds up to {number(laid.map_force)} N, but {number(laid.force)} N "
            f"press on '{load.region.name}'. Check first_cell_mm, cell_mm, the directions and the "
            f"region; if it is meant so, raise accept_force_within ({within:g})."
        )
    expected = load.expected_force
    if expected is not None and abs(laid.map_force - expected) > within * expected:
        ratio = laid.map_force / expected
        raise InputError(
            f"{_title(load)} adds up to {number(laid.map_force)} N, {number(ratio)} times the "
            f"expected_force_N of {number(expected)} N. Check the unit and cell_mm; if it is meant "
            f"so, raise accept_force_within ({within:g})."
        )


def _check_centre(
    part: Part, load: PressureMap, laid: LaidMap, expected: tuple[float, float]
) -> list[str]:
    """Compare the centre, and the centres of the mirrored map, with the expected one."""
    off = math.dist(laid.centre, expected)
    cell = max(load.cell)
    axes = _axis_names(load)
    best, words = off, ""
    for rows, columns, name in (
        (1, -1, "left to right"),
        (-1, 1, "top to bottom"),
        (-1, -1, "both ways (turned by half a turn)"),
    ):
        mirrored = dataclasses.replace(load, values=load.values[::rows, ::columns])
        try:
            distance = math.dist(lay_on(part, mirrored).centre, expected)
        except InputError:
            continue
        if distance < best:
            best, words = distance, name
    if best < 0.5 * off and off > _NEAR * cell:
        sure = off > cell
        lies = "lies" if sure else "may lie"
        text = (
            f"{_title(load)} {lies} mirrored: its centre of pressure is at "
            f"{_place(laid.centre, axes)}, {number(off)} mm from expected_centre_mm; mirrored "
            f"{words} it would be {number(best)} mm off. Turn columns_grow or rows_grow round and "
            "move first_cell_mm to the cell that is then the first."
        )
        if sure:
            raise InputError(text)
        return [text]
    if off > 2 * cell:
        return [
            f"{_title(load)} has its centre of pressure at {_place(laid.centre, axes)}, "
            f"{number(off)} mm from where it was expected."
        ]
    return []


def sample(values: Floats, settings: Mapping[str, Any], points: Floats) -> Floats:
    """Values of a map over points by bilinear interpolation; nan outside its cells.

    Parameters
    ----------
    values : ndarray, shape (rows, columns)
    settings : mapping
        ``side``, ``cell_mm``, ``first_cell_mm``, ``columns_grow``, ``rows_grow`` of a design.
    points : ndarray, shape (n, 3)
        mm.

    Returns
    -------
    ndarray, shape (n,)
    """
    from scipy import ndimage

    axis, _ = parse_side(settings["side"], "map")
    first = dict(zip([a for a in range(3) if a != axis], settings["first_cell_mm"], strict=True))
    index = []
    width, height = settings["cell_mm"]
    for direction, step in ((settings["rows_grow"], height), (settings["columns_grow"], width)):
        a, sense = parse_side(direction, "map")
        index.append(sense * (points[:, a] - first[a]) / step)
    out = ndimage.map_coordinates(values, index, order=1, mode="nearest")
    inside = np.ones(len(points), dtype=bool)
    for at, count in zip(index, values.shape, strict=True):
        inside &= (at >= -0.5) & (at <= count - 0.5)
    return np.where(inside, out, np.nan)

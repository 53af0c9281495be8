"""Verdicts on a design's requirements: value, band, doubts, and what stands behind them."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.loads import describe
from voxelmat.fea.peaks import peak_at
from voxelmat.fea.stress import safety_field
from voxelmat.model.part import Part
from voxelmat.model.requirement import Requirement, Verdict, judge
from voxelmat.model.result import StaticResult
from voxelmat.units import number, quantity
from voxelmat.workflow.doubts import (
    condition_doubts,
    data_doubts,
    expansion_doubts,
    peak_doubts,
    place_words,
    size_doubts,
)
from voxelmat.workflow.interfaces import interface_safety
from voxelmat.workflow.resolve import Resolved
from voxelmat.workflow.spread import Spread, driven_by, spread_of

__all__ = ["safety_factors", "verdicts"]

_GRAMS = 1e6  # in a tonne


@dataclass(frozen=True, slots=True, kw_only=True)
class _Measured:
    """A value with its band (None where it cannot be given), doubts and grounds."""

    value: float
    band: tuple[float, float] | None
    doubts: tuple[str, ...] = ()
    grounds: tuple[str, ...] = ()


def safety_factors(result: StaticResult) -> NDArray[np.float32]:
    """Strength over von Mises stress in each voxel; nan where empty or no strength is known.

    A blend is judged by the weakest resin in it.
    """
    field = safety_field(result)
    return np.where(np.isfinite(field), field, np.float32(np.nan))


def verdicts(resolved: Resolved, part: Part, results: Mapping[str, StaticResult]) -> list[Verdict]:
    """Judge every requirement of a design.

    Bands come from the ranges of the materials by energy bounds (see
    `voxelmat.workflow.spread.Spread`); they are bounds for the work of the loads and an estimate
    for other displacements. Mass follows the ranges of the densities.

    Parameters
    ----------
    resolved : Resolved
    part : Part
        What is weighed.
    results : mapping of str to StaticResult
        By load case.

    Returns
    -------
    list of Verdict
        One a requirement, in the design's order.
    """
    spreads = {name: spread_of(result) for name, result in results.items()}
    found = []
    for requirement in resolved.requirements:
        try:
            measured = _measure(requirement, resolved, part, results, spreads)
        except InputError as error:
            measured = _Measured(value=math.nan, band=None, doubts=(error.message.rstrip("."),))
        verdict = judge(requirement, measured.value, measured.band, measured.doubts)
        reasons = (*verdict.reasons, *measured.grounds)
        found.append(dataclasses.replace(verdict, reasons=reasons))
    return found


def _measure(
    requirement: Requirement,
    resolved: Resolved,
    part: Part,
    results: Mapping[str, StaticResult],
    spreads: Mapping[str, Spread],
) -> _Measured:
    if requirement.measure == "mass":
        return _mass(requirement, part)
    if requirement.measure == "volume":
        volumes = part.volumes()
        value = volumes.get(requirement.resin, 0.0) if requirement.resin else sum(volumes.values())
        return _Measured(value=value, band=(value, value))
    name = requirement.load_case
    if requirement.target is not None:
        name = resolved.targets[requirement.target].load_case
    if name is None or name not in results:
        raise InputError(f"load case '{name}' was not solved")
    result, spread = results[name], spreads[name]
    measure: dict[str, Callable[..., _Measured]] = {
        "displacement": _displacement,
        "stiffness": _stiffness,
        "reaction": _reaction,
        "safety factor": _safety,
        "interface safety factor": _interface,
        "largest strain": _strain,
        "deflection error": _deflection,
    }
    found = measure[requirement.measure](requirement, resolved, result, spread)
    common = (
        *data_doubts(result.part, spread),
        *size_doubts(result),
        *condition_doubts(result, spread),
        *expansion_doubts(result),
    )
    return dataclasses.replace(found, doubts=(*common, *found.doubts))


def _mass(requirement: Requirement, part: Part) -> _Measured:
    """Mass in g, bought-in bodies too; the band follows the ranges of the densities."""
    volumes = part.volumes()
    names = [n for n in volumes if requirement.resin in (None, n)]
    densities = {n: part.resin(n).density for n in names}
    value = _GRAMS * math.fsum(volumes[n] * densities[n].value for n in names)
    low, high = (
        _GRAMS * math.fsum(volumes[n] * densities[n].band[end] for n in names) for end in (0, 1)
    )
    weak = [n for n in names if densities[n].indicative]
    doubts = [f"the density of {', '.join(repr(n) for n in weak)} is indicative"] if weak else []
    bought = _GRAMS * math.fsum(
        volumes[n] * densities[n].value for n in names if part.resin(n).kind == "bought-in"
    )
    grounds = (f"{quantity(bought, 'g')} of it are bought in",) if 0 < bought < value else ()
    return _Measured(value=value, band=(low, high), doubts=tuple(doubts), grounds=grounds)


def _scaled(result: StaticResult, spread: Spread, value: float, *, power: int) -> _Measured:
    """A value that goes with the flexibility (1) or the stiffness (-1) of the part."""
    lowest, highest = 1.0 / spread.stiffer, spread.softer
    if power < 0:
        lowest, highest = 1.0 / spread.softer, spread.stiffer
    ends = sorted((value * lowest, value * highest))
    grounds = (
        "the band bounds the work of the loads over the ranges of the moduli (energy theorems) "
        "and is taken for this value",
    )
    return _Measured(value=value, band=(ends[0], ends[1]), grounds=grounds)


def _unscaled(spread: Spread, value: float, why: str) -> _Measured:
    """A value whose change with the moduli is not known: a doubt where the moduli have ranges."""
    exact = spread.softer == 1.0 and spread.stiffer == 1.0
    return _Measured(value=value, band=(value, value), doubts=() if exact else (why,))


_MOVED = "the ranges of the moduli cannot be carried to this value where displacements are given"


def _displacement(
    requirement: Requirement, resolved: Resolved, result: StaticResult, spread: Spread
) -> _Measured:
    region = resolved.regions[requirement.region or ""]
    value = result.over(region, requirement.component, requirement.reduce)
    if driven_by(result) == "force":
        return _scaled(result, spread, value, power=1)
    return _unscaled(spread, value, _MOVED)


def _stiffness(
    requirement: Requirement, resolved: Resolved, result: StaticResult, spread: Spread
) -> _Measured:
    """Resultant of the load on the region over its mean displacement along it."""
    names = [
        describe(load, n)
        for n, load in enumerate(result.load_case.loads, start=1)
        if load.region is not None and load.region.name == requirement.region
    ]
    names += [
        f"plate '{p.name}' on '{p.region.name}'"
        for p in result.load_case.plates
        if p.region.name == requirement.region
    ]
    names = [n for n in names if n in result.load_displacement]
    if len(names) != 1:
        raise InputError(
            f"a stiffness needs exactly one force or pressure on '{requirement.region}' in load "
            f"case '{result.load_case.name}'; there are {len(names)}"
        )
    moved = result.load_displacement[names[0]]
    if not moved > 0:
        raise InputError("the load does not move its region along itself")
    value = float(np.linalg.norm(result.resultants[names[0]])) / moved
    if driven_by(result) == "force":
        return _scaled(result, spread, value, power=-1)
    return _unscaled(spread, value, _MOVED)


def _reaction(
    requirement: Requirement, resolved: Resolved, result: StaticResult, spread: Spread
) -> _Measured:
    """Force of the supports and springs on a region, along an axis or its size."""
    wanted = f" on '{requirement.region}'"
    mine = [v for n, v in result.reactions.items() if n.endswith(wanted)]
    if not mine:
        raise InputError(
            f"load case '{result.load_case.name}' has no support on '{requirement.region}'"
        )
    total = np.sum(mine, axis=0)
    if requirement.component == "size":
        value = float(np.linalg.norm(total))
    else:
        value = float(total["xyz".index(requirement.component)])
    driven = driven_by(result)
    if driven == "force" and len(mine) == len(result.reactions):
        return _Measured(value=value, band=(value, value), grounds=("it follows from balance",))
    if driven == "displacement":
        return _scaled(result, spread, value, power=-1)
    return _unscaled(
        spread,
        value,
        "several supports share the load, and the ranges of the moduli decide how",
    )


def _judged(
    requirement: Requirement, resolved: Resolved, result: StaticResult
) -> NDArray[np.bool_]:
    """Voxels of the requirement's region whose local values mean something."""
    part = result.part
    inside = part.solid & (part.fill >= 0.5)
    if requirement.region is not None:
        inside = inside & resolved.regions[requirement.region].voxels(part)
    if not inside.any():
        raise InputError(
            f"region '{requirement.region or 'whole part'}' holds no voxel that is at least half "
            "full"
        )
    return inside


def _cell(part: Part, index: int) -> tuple[tuple[int, int, int], tuple[float, float, float]]:
    i, j, k = (int(c) for c in np.unravel_index(index, part.grid.shape))
    x, y, z = part.grid.centres()
    return (i, j, k), (float(x[i]), float(y[j]), float(z[k]))


def _safety(
    requirement: Requirement, resolved: Resolved, result: StaticResult, spread: Spread
) -> _Measured:
    """Smallest strength over von Mises stress, each voxel against its own weakest resin."""
    part = result.part
    field = np.where(_judged(requirement, resolved, result), safety_factors(result), np.nan)
    if not np.isfinite(field).any():
        raise InputError("no resin there has a strength in its record")
    cell, place = _cell(part, int(np.nanargmin(field)))
    value = float(field[cell])
    names = [n for n, _ in part.palette[int(part.labels[cell])].fractions]
    warm = result.load_case.temperature_degC
    known = [(c, n) for n in names if (c := part.resin(n).strength_at(warm)) is not None]
    strength, resin = min(known, key=lambda item: item[0].value)
    low, high = (edge / strength.value for edge in strength.band)
    doubts = list(peak_doubts(result, cell))
    if strength.indicative:
        doubts.append(f"the strength of '{resin}' is indicative")
    if len(names) > 1:
        doubts.append("the strength of a blend is taken as that of its weakest resin")
    if driven_by(result) != "force":
        doubts += _unscaled(spread, value, _MOVED).doubts
    band = (value * low / spread.stress, value * high * spread.stress)
    grounds = [f"smallest in '{resin}' at {place_words(place)}"]
    peak = peak_at(result, cell)
    if peak.stepped and peak.filtered_max > 0:
        grounds.append(
            f"without the voxels at the surface it is {number(strength.value / peak.filtered_max)} "
            f"round there"
        )
    return _Measured(value=value, band=band, doubts=tuple(doubts), grounds=tuple(grounds))


def _interface(
    requirement: Requirement, resolved: Resolved, result: StaticResult, spread: Spread
) -> _Measured:
    """Smallest bond strength over traction between resins in a region."""
    region = resolved.regions[requirement.region] if requirement.region is not None else None
    found = interface_safety(result, resolved.bonds, region)
    doubts = found.doubts
    if driven_by(result) != "force":
        doubts += _unscaled(spread, found.value, _MOVED).doubts
    band = (found.low / spread.stress, found.high * spread.stress)
    return _Measured(value=found.value, band=band, doubts=doubts, grounds=found.grounds)


def _strain(
    requirement: Requirement, resolved: Resolved, result: StaticResult, spread: Spread
) -> _Measured:
    """Largest principal strain (size) in a region."""
    cells = np.argwhere(_judged(requirement, resolved, result))
    strain = result.strain[tuple(cells.T)].astype(np.float64)
    tensor = np.empty((len(cells), 3, 3))
    for c in range(3):
        tensor[:, c, c] = strain[:, c]
    for c, (a, b) in enumerate(((0, 1), (0, 2), (1, 2))):
        tensor[:, a, b] = tensor[:, b, a] = 0.5 * strain[:, 3 + c]
    size = np.abs(np.linalg.eigvalsh(tensor)).max(axis=1)
    top = int(size.argmax())
    i, j, k = (int(c) for c in cells[top])
    value = float(size[top])
    if driven_by(result) == "force":
        found = _scaled(result, spread, value, power=1)
    else:
        found = _unscaled(spread, value, _MOVED)
    doubts = (*found.doubts, *peak_doubts(result, (i, j, k)))
    return dataclasses.replace(found, doubts=doubts)


def _deflection(
    requirement: Requirement, resolved: Resolved, result: StaticResult, spread: Spread
) -> _Measured:
    """Root mean square distance from a target over its nodes, mm."""
    target = resolved.targets[requirement.target or ""]
    u = result.displacement[target.nodes] @ np.asarray(target.direction)
    wanted = target.deflection[target.nodes]

    def error(scale: float) -> float:
        return float(np.sqrt(np.mean((scale * u - wanted) ** 2)))

    value = error(1.0)
    if driven_by(result) != "force":
        return _unscaled(spread, value, _MOVED)
    ends = [1.0 / spread.stiffer, spread.softer]
    # The error is smallest where the scale fits best, if that lies within the band.
    moved = float(u @ u)
    best = float(u @ wanted) / moved if moved > 0 else 1.0
    tried = [error(s) for s in (*ends, min(max(best, ends[0]), ends[1]))]
    return _Measured(
        value=value,
        band=(min(tried), max(tried)),
        grounds=("the band scales all deflections as far as the ranges of the moduli allow",),
    )

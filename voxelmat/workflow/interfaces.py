"""What the interfaces between resins bear: smallest safety factor, rows for the report."""

from __future__ import annotations

import math
from collections.abc import Iterable
from typing import NamedTuple

import numpy as np

from voxelmat.errors import InputError
from voxelmat.fea.interfaces import interface_tractions
from voxelmat.fea.worst_interfaces import worst_interfaces
from voxelmat.model.interface import Bond, InterfaceResult, InterfaceSpot, find_bond
from voxelmat.model.region import Region
from voxelmat.model.result import StaticResult
from voxelmat.units import number, quantity

__all__ = ["InterfaceSafety", "interface_safety", "interface_spots", "spot_rows"]

# A traction that the stresses of both sides miss by more than this share is in doubt; ours.
_JUMP = 0.5
#: Places a pair in the report.
SHOWN = 3


class InterfaceSafety(NamedTuple):
    """Smallest strength over traction with its band, doubts and grounds."""

    value: float
    low: float
    high: float
    doubts: tuple[str, ...]
    grounds: tuple[str, ...]


def interface_spots(result: StaticResult, bonds: Iterable[Bond]) -> tuple[InterfaceSpot, ...]:
    """The worst places of each pair of resins that meet."""
    return worst_interfaces(interface_tractions(result, bonds), SHOWN)


def _where(place: tuple[float, float, float]) -> str:
    return f"({', '.join(number(p) for p in place)}) mm"


def _within(found: InterfaceResult, result: StaticResult, region: Region | None) -> InterfaceResult:
    """The faces that touch a voxel of the region."""
    if region is None:
        return found
    inside = region.voxels(result.part)
    beyond = found.voxel + np.eye(3, dtype=np.intp)[found.axis]
    return found.select(inside[tuple(found.voxel.T)] | inside[tuple(beyond.T)])


def _doubts(result: StaticResult, spot: InterfaceSpot, bond: Bond) -> list[str]:
    names = " + ".join(spot.resins)
    doubts = []
    if spot.indicative:
        doubts.append(f"the bond strength of {names} is indicative")
    if spot.at_edge:
        doubts.append(
            "its extreme lies where the interface ends in the open or is held or loaded, where the "
            "traction may grow with every refinement of the grid"
        )
    if spot.stepped:
        doubts.append(
            f"its extreme lies on a stepped interface, where a single face is not reliable; round "
            f"it {number(100 * spot.mean_utilisation)} % of the strength is used on average"
        )
    size = math.hypot(spot.normal, spot.shear)
    if spot.jump > _JUMP * size:
        doubts.append(
            f"the stresses on both sides differ from each other by {quantity(2 * spot.jump, 'MPa')}"
            f": the grid is too coarse there"
        )
    tested = bond.tensile.temperature_degC
    if abs(result.load_case.temperature_degC - tested) > 10.0:  # common practice, no source
        doubts.append(f"the bond of {names} was tested at {number(tested)} degC")
    return doubts


def interface_safety(
    result: StaticResult, bonds: Iterable[Bond], region: Region | None
) -> InterfaceSafety:
    """Smallest strength over traction of the interfaces in a region.

    Raises
    ------
    InputError
        Where no two resins meet there, or none of the pairs has a record.
    """
    found = _within(interface_tractions(result, bonds), result, region)
    where = region.name if region is not None else "whole part"
    spots = worst_interfaces(found, 1)
    if not spots:
        raise InputError(f"no two resins meet at an interface in '{where}'")
    missing = [" + ".join(s.resins) for s in spots if math.isnan(s.utilisation)]
    worst = spots[0]
    if math.isnan(worst.utilisation):
        raise InputError(f"the bond strength of {', '.join(missing)} has no record")
    bond = find_bond(found.bonds, *worst.resins)
    doubts = [] if bond is None else _doubts(result, worst, bond)
    if missing:
        doubts.append(f"the bond strength of {', '.join(missing)} has no record")
    kind = "pulled apart" if worst.normal > worst.shear else "sheared"
    grounds = (
        f"worst between {' and '.join(worst.resins)} at {_where(worst.place_mm)}, mostly {kind}: "
        f"normal {quantity(worst.normal, 'MPa')}, shear {quantity(worst.shear, 'MPa')}",
    )
    high = 1.0 / worst.utilisation_low if worst.utilisation_low > 0 else math.inf
    low = 1.0 / worst.utilisation_high if worst.utilisation_high > 0 else math.inf
    return InterfaceSafety(worst.safety_factor, low, high, tuple(doubts), grounds)


def spot_rows(spots: Iterable[InterfaceSpot]) -> tuple[tuple[str, ...], ...]:
    """Cells of a table: pair, place, normal, shear, share of strength, remarks."""
    rows = []
    for spot in spots:
        remarks = []
        if math.isnan(spot.utilisation):
            used = "no record"
        else:
            used = f"{number(100 * spot.utilisation)} %"
            remarks += ["strength indicative"] if spot.indicative else []
        remarks += ["at an edge"] if spot.at_edge else []
        remarks += ["on steps"] if spot.stepped else []
        rows.append(
            (
                " + ".join(spot.resins),
                ", ".join(number(p) for p in spot.place_mm),
                number(spot.normal),
                number(spot.shear),
                number(spot.jump),
                used,
                ", ".join(remarks),
            )
        )
    return tuple(rows)

"""Reasons that keep a computed value from being judged."""

from __future__ import annotations

import itertools

import numpy as np

from voxelmat.fea.peaks import is_stepped
from voxelmat.material.conditions import cautions_for
from voxelmat.model.laws import CalibratedCurve
from voxelmat.model.loadcase import Temperature
from voxelmat.model.part import Part
from voxelmat.model.region import solid_nodes
from voxelmat.model.result import ROTATION_LIMIT, STRAIN_LIMIT, StaticResult
from voxelmat.model.symmetry import SymmetryPlane
from voxelmat.units import number
from voxelmat.workflow.spread import Spread

__all__ = [
    "condition_doubts",
    "data_doubts",
    "expansion_doubts",
    "peak_doubts",
    "place_words",
    "size_doubts",
]

#: Materials that carry less of the strain energy than this do not decide a displacement; ours.
MATTERS = 0.01


def place_words(place: tuple[float, float, float]) -> str:
    """A place as text."""
    return f"({', '.join(number(p) for p in place)}) mm"


def data_doubts(part: Part, spread: Spread) -> list[str]:
    """Stiffness without a source, of the materials and blends that carry the load."""
    found = []
    weak = [
        m.name for m in part.resins if m.indicative and spread.shares.get(m.name, 0.0) > MATTERS
    ]
    if weak:
        found.append(f"the stiffness of {_listed(weak)} is indicative: no source stands behind it")
    curves = {c.pair: c for c in part.law.curves} if isinstance(part.law, CalibratedCurve) else {}
    unproven: set[str] = set()
    modelled: set[str] = set()
    for resins, share in spread.blends.items():
        if share <= MATTERS:
            continue
        for pair in itertools.combinations(resins, 2):
            curve = curves.get(frozenset(pair))
            if curve is None:
                modelled.add(" + ".join(pair))
            elif curve.indicative:
                unproven.add(" + ".join(pair))
    if unproven:
        found.append(f"the blend curve of {_listed(sorted(unproven))} is indicative")
    if modelled:
        law = part.law.key if not curves else "log-mix"
        found.append(
            f"the stiffness of blends of {_listed(sorted(modelled))} follows the law '{law}', "
            "not a measured curve"
        )
    return found


def _listed(names: list[str]) -> str:
    return ", ".join(f"'{n}'" for n in names)


def condition_doubts(result: StaticResult, spread: Spread) -> list[str]:
    """Materials that carry load outside the conditions of their record."""
    case = result.load_case
    used = result.part.volumes()
    found = [
        caution.rstrip(".")
        for m in result.part.resins
        # One that is free to expand stores no energy and yet decides the value.
        if spread.shares.get(m.name, 0.0) > MATTERS or (case.strains and m.name in used)
        for temperature in dict.fromkeys((case.temperature_degC, *case.temperature_ends))
        for caution in cautions_for(
            m,
            temperature_degC=temperature,
            duration_s=case.duration_s,
            cycles=case.cycles,
        )
    ]
    return list(dict.fromkeys(found))


def expansion_doubts(result: StaticResult) -> list[str]:
    """Thermal expansion without a source, or with a range that no band carries."""
    part = result.part
    if not any(isinstance(load, Temperature) for load in result.load_case.loads):
        return []
    used = part.volumes()
    known = {m.name: m.expansion for m in part.resins if m.name in used and m.expansion}
    weak = [n for n, c in known.items() if c.indicative]
    wide = [n for n, c in known.items() if c.band[0] < c.band[1]]
    found = []
    if weak:
        found.append(f"the thermal expansion of {', '.join(map(repr, weak))} is indicative")
    if wide:
        found.append(
            f"the range of the thermal expansion of {', '.join(map(repr, wide))} is not carried "
            "to this value"
        )
    return found


def size_doubts(result: StaticResult) -> list[str]:
    """Strain or rotation beyond what a linear answer for small displacements may claim."""
    found = []
    for what, extreme, limit, unit in (
        ("strain", result.largest_strain, STRAIN_LIMIT, ""),
        ("rotation", result.largest_rotation, ROTATION_LIMIT, " rad"),
    ):
        if abs(extreme.value) > limit:
            found.append(
                f"the largest {what}, {number(extreme.value)}{unit} at "
                f"{place_words(extreme.place_mm)}, is beyond {number(limit)}{unit}, the limit of "
                "this small-displacement method"
            )
    return found


def peak_doubts(result: StaticResult, cell: tuple[int, int, int]) -> list[str]:
    """Whether a local value in a voxel hangs on the steps of the voxels or on a support's edge."""
    part = result.part
    found = []
    if is_stepped(part, cell):
        found.append(
            "its extreme lies on a stepped or re-entrant surface, where the value of a single "
            "voxel is not reliable however fine the grid"
        )
    alone = np.zeros(part.grid.shape, dtype=bool)
    alone[cell] = True
    corners = solid_nodes(alone)
    case = result.load_case
    # A mirrored part has no edge where its symmetry plane is.
    holders = [("support", s.region) for s in case.supports]
    holders = [h for h in holders if not isinstance(h[1], SymmetryPlane)]
    holders += [("plate", p.region) for p in case.plates]
    for what, region in holders:
        if (region.nodes(part) & corners).any():
            found.append(
                f"its extreme lies at the {what} on '{region.name}', where the value grows with "
                "every refinement of the grid"
            )
            break
    return found

"""The report's tables: plain rows of text, every head with its unit."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from voxelmat.model.loadcase import LoadCase
from voxelmat.model.part import Part
from voxelmat.model.region import solid_nodes
from voxelmat.model.requirement import Requirement, Verdict
from voxelmat.model.result import ROTATION_LIMIT, STRAIN_LIMIT, StaticResult
from voxelmat.model.surface import carriers
from voxelmat.units import number, quantity
from voxelmat.workflow.colours import resin_colours
from voxelmat.workflow.report_data import RunData, StackSummary
from voxelmat.workflow.report_words import (
    expectation,
    held_words,
    load_words,
    percent,
    place,
    plate_words,
)

__all__ = [
    "Table",
    "asked",
    "compared_table",
    "expectation",
    "found_table",
    "load_table",
    "measured",
    "percent",
    "place",
    "resin_table",
    "stack_table",
    "verdict_rows",
]


@dataclass(frozen=True, slots=True, kw_only=True)
class Table:
    """Rows of text.

    Attributes
    ----------
    head : tuple of str
    rows : tuple of tuple of str
    caption : str
    numbers : tuple of int
        Columns that hold numbers and are set to the right.
    swatches : tuple of str
        Colour beside the first cell of each row, where there is one.
    """

    head: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    caption: str = ""
    numbers: tuple[int, ...] = ()
    swatches: tuple[str, ...] = ()


def asked(requirement: Requirement) -> str:
    """The limits, in words."""
    unit = requirement.unit
    limits = []
    if requirement.at_least is not None:
        limits.append(f"at least {quantity(requirement.at_least, unit)}")
    if requirement.at_most is not None:
        limits.append(f"at most {quantity(requirement.at_most, unit)}")
    return ", ".join(limits)


def measured(requirement: Requirement) -> str:
    """What is compared with the limits, in words."""
    text = requirement.measure
    if requirement.measure == "displacement":
        along = "" if requirement.component == "size" else f" along {requirement.component}"
        reduce = {"mean": "mean", "max": "largest", "min": "smallest"}[requirement.reduce]
        text = f"{reduce} displacement{along}"
    if requirement.resin:
        text += f" of {requirement.resin}"
    if requirement.region:
        text += f" at '{requirement.region}'"
    if requirement.load_case:
        text += f" under '{requirement.load_case}'"
    return text


_MARKS = {"met": ("✓", "met"), "not met": ("✗", "not"), "cannot be said": ("?", "unsaid")}


def verdict_rows(verdicts: Sequence[Verdict]) -> list[dict[str, str]]:
    """One dict of text a verdict, worst first, for the template."""
    order = {"not met": 0, "cannot be said": 1, "met": 2}
    rows = []
    for verdict in sorted(verdicts, key=lambda v: order[v.status]):
        need = verdict.requirement
        mark, kind = _MARKS[verdict.status]
        spread = verdict.low != verdict.high and math.isfinite(verdict.low)
        rows.append(
            {
                "name": need.name,
                "measured": measured(need),
                "asked": asked(need),
                "value": quantity(verdict.value, need.unit),
                "band": f"{number(verdict.low)} to {number(verdict.high)}" if spread else "",
                "margin": percent(verdict.margin),
                "mark": mark,
                "kind": kind,
                "status": verdict.status,
                "why": "; ".join(verdict.reasons),
            }
        )
    return rows


def resin_table(part: Part) -> Table:
    """Volume, mass and stiffness of each material, and where the stiffness comes from."""
    volumes, masses = part.volumes(), part.masses()
    total = sum(volumes.values()) or 1.0
    colours = resin_colours(part)
    rows = []
    for name, volume in volumes.items():
        record = part.resin(name)
        low, high = record.E.band
        rows.append(
            (
                name,
                record.kind,
                record.E.source,
                number(volume),
                number(masses[name] * 1e6),
                number(100.0 * volume / total),
                number(record.E.value),
                f"{number(low)} to {number(high)}" if low < high else "as stated",
            )
        )
    rows.append(
        ("all", "", "", number(sum(volumes.values())), number(part.mass * 1e6), "100", "", "")
    )
    return Table(
        head=(
            "material",
            "kind",
            "source of E",
            "volume, mm³",
            "mass, g",
            "share, %",
            "E, MPa",
            "range of E, MPa",
        ),
        rows=tuple(rows),
        numbers=(3, 4, 5, 6, 7),
        swatches=tuple(colours.get(n, "") for n in volumes),
    )


def load_table(case: LoadCase) -> Table:
    """Supports and loads of a case."""
    rows = [("support", s.region.name, held_words(s)) for s in case.supports]
    rows += [(f"plate {p.name}", p.region.name, plate_words(p)) for p in case.plates]
    rows += [load_words(load) for load in case.loads]
    return Table(
        head=("what", "where", "how much"),
        rows=tuple(rows),
        caption=f"lasts {quantity(case.duration_s, 's')}, at {number(case.temperature_degC)} °C, "
        f"{case.cycles} time{'s' if case.cycles != 1 else ''}",
    )


def found_table(run: RunData, name: str) -> Table:
    """What one load case does, in figures."""
    result = run.results[name]
    size = result.size
    at = np.unravel_index(int(size.argmax()), size.shape)
    where = place([float(n[i]) for n, i in zip(result.part.grid.nodes(), at, strict=True)])
    strain, turn = result.largest_strain, result.largest_rotation
    rows = [("largest displacement", quantity(float(size.max()), "mm"), f"at {where} mm")]
    for key, move in result.load_displacement.items():
        force = math.sqrt(sum(f * f for f in result.resultants[key]))
        rows.append(
            (
                f"mean movement along {key}",
                quantity(move, "mm"),
                f"of {quantity(force, 'N')}",
            )
        )
    for key, force3 in result.reactions.items():
        rows.append((f"reaction of {key}", f"{place(force3)} N", "along x, y, z"))
    for key, plate in result.plates.items():
        degrees = place([math.degrees(r) for r in plate.rotation])
        rows.append(
            (
                f"plate {key} at {place(plate.point)} mm",
                f"moves {place(plate.translation)} mm, turns {degrees}°",
                f"pushes the part with {place(plate.force)} N, {place(plate.moment)} N mm",
            )
        )
    safety = run.safety.get(name)
    if safety is not None and np.isfinite(safety).any():
        spot = np.unravel_index(int(np.nanargmin(safety)), safety.shape)
        corner = place([float(c[i]) for c, i in zip(result.part.grid.centres(), spot, strict=True)])
        rows.append(
            ("least strength over stress", number(float(np.nanmin(safety))), f"at {corner} mm")
        )
    rows += [
        (
            "largest strain",
            f"{number(100 * strain.value)} %",
            _against(100 * strain.value, 100 * STRAIN_LIMIT, "%", strain.place_mm),
        ),
        (
            "largest rotation",
            f"{number(math.degrees(turn.value))}°",
            _against(math.degrees(turn.value), math.degrees(ROTATION_LIMIT), "°", turn.place_mm),
        ),
        ("loads against reactions", number(result.balance), "difference over load; 0 is exact"),
        ("residual of the solver", number(result.residual, 2), "over the load; 0 is exact"),
    ]
    error = run.energy_error.get(name)
    if error is not None:
        rows.append(
            (
                "estimated error by voxel size",
                f"{number(100 * error.share, 2)} %",
                f"of the strain energy, without the steps of the outline; most at "
                f"{place(error.place_mm)} mm",
            )
        )
    coarser = run.grid_error.get(name)
    if coarser is not None:
        off = coarser.displacement_error
        told = f"{number(100 * abs(off), 2)} %" if math.isfinite(off) else "not known"
        rows.append(
            (
                "largest displacement, error by voxel size",
                told,
                " ".join((coarser.words, *(coarser.notes if math.isfinite(off) else ()))),
            )
        )
    return Table(head=("figure", "value", "note"), rows=tuple(rows), numbers=(1,))


def _against(value: float, limit: float, unit: str, at: Sequence[float]) -> str:
    side = "above" if abs(value) > limit else "below"
    gap = "" if unit == "°" else " "
    return f"{side} the method's limit of {number(limit)}{gap}{unit}, at {place(at)} mm"


def _change(before: float, after: float) -> str:
    return percent((after - before) / abs(before)) if before else "not known"


def compared_table(run: RunData) -> Table | None:
    """Designed against as-printed displacement; None where the stack was not solved."""
    rows = []
    for name, printed in run.as_printed.items():
        if name not in run.results:
            continue
        designed = run.results[name]
        pairs = [("largest displacement", float(designed.size.max()), float(printed.size.max()))]
        pairs += [
            (f"mean along {k}", v, printed.load_displacement[k])
            for k, v in designed.load_displacement.items()
            if k in printed.load_displacement
        ]
        for what, before, after in pairs:
            rows.append((name, what, number(before), number(after), _change(before, after)))
        rows.append(
            (
                name,
                "typical difference (rms) over typical size",
                "",
                "",
                _difference(designed, printed),
            )
        )
    if not rows:
        return None
    return Table(
        head=("load case", "figure", "designed, mm", "as printed, mm", "difference"),
        rows=tuple(rows),
        numbers=(2, 3, 4),
    )


def _difference(designed: StaticResult, printed: StaticResult) -> str:
    """Root mean square of the difference over that of the displacement, percent.

    Over the nodes of the voxels at least half full in both: thinner ones are where the outlines
    of the two are rounded to the grid differently.
    """
    if designed.displacement.shape != printed.displacement.shape:
        return "not on the same grid"
    both = solid_nodes(carriers(designed.part)) & solid_nodes(carriers(printed.part))
    before, after = designed.displacement[both], printed.displacement[both]
    size = float(np.sqrt((before**2).mean())) if both.any() else 0.0
    off = float(np.sqrt(((before - after) ** 2).mean())) if both.any() else 0.0
    return f"{number(100.0 * off / size, 2)} %" if size > 0 else "not known"


def stack_table(stack: StackSummary) -> Table:
    """What each channel lays, against what the design asks for."""
    designed = stack.designed_mm3 or (None,) * len(stack.resins)
    rows = []
    for channel, resin, laid, wanted in zip(
        stack.channels, stack.resins, stack.volumes_mm3, designed, strict=True
    ):
        rows.append(
            (
                channel,
                resin,
                number(laid, 4),
                "" if wanted is None else number(wanted, 4),
                "" if wanted is None else _change(wanted, laid),
            )
        )
    return Table(
        head=("channel", "resin", "laid, mm³", "designed, mm³", "difference"),
        rows=tuple(rows),
        numbers=(2, 3, 4),
    )

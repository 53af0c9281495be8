"""The job ticket: one A4 page for the print room, without any outside resource."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import date
from pathlib import Path
from typing import Any

from jinja2 import Environment, PackageLoader, StrictUndefined

from voxelmat.errors import InputError
from voxelmat.io.atomic import write_text
from voxelmat.model.finding import Finding
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.bill import BillRow
from voxelmat.printing.estimate import PrintEstimate, estimate
from voxelmat.printing.occupancy import Occupancy, gather
from voxelmat.printing.readback import Stack
from voxelmat.units import number
from voxelmat.workflow.topview import shadow_drawing, tray_drawing

__all__ = ["Loaded", "page", "ticket_warnings", "write_ticket"]

#: Resin that should be left over when a job ends, as a share of what it needs. Ours.
RESERVE = 0.1
_NAMED = 8  # parts, and warnings of a kind, that fit on the page; the rest is counted
_LONG = 40  # characters of a name that fit

# Common practice, no source.
_CLEANING = (
    "Let the print and the tray come to room temperature in the closed machine.",
    "Lift the print off the tray with a flat scraper; do not bend thin soft walls.",
    "Take the support off by hand where it is thick, then as its data sheet says.",
    "Rinse, dry, and cure further where the data sheets of the resins ask for it.",
    "Weigh the print and note it: voxelmat record.",
)
_CAUTIONS = (
    "Uncured resin irritates and can cause allergy: gloves, glasses, air flow. Uncured rests and "
    "rinsing liquid are waste for collection, not for the drain.",
    "Skin: not for lasting contact with skin unless the data sheets of all its resins and of the "
    "support say so, and cleaning and curing are done.",
    "Load: none before the print is clean, dry and cured; then only the loads that its report "
    "judges. A print that was stopped and taken up again carries no load.",
)


@dataclass(frozen=True, slots=True, kw_only=True)
class Loaded:
    """What the machine holds of one resin: grams, lot, last day of use; what is not known is None.

    Raises
    ------
    InputError
        If the grams are below 0.
    """

    grams: float | None = None
    lot: str = ""
    expiry: date | None = None

    def __post_init__(self) -> None:
        if self.grams is not None and not 0 <= self.grams < 1e7:
            raise InputError(f"Loaded resin is given in grams, 0 or more; got {self.grams}.")


def _needed(bill: Sequence[BillRow]) -> dict[str, float]:
    """Grams of each resin over all its rows; purge once."""
    total: dict[str, float] = {}
    for row in bill:
        total[row.resin] = total.get(row.resin, 0.0) + row.needed_g
    return total


def ticket_warnings(
    bill: Sequence[BillRow], loaded: Mapping[str, Loaded], day: date
) -> list[tuple[str, str]]:
    """What stands against printing with what is loaded.

    Returns
    -------
    list of (str, str)
        "stop" (too little, expired), "warn" (no reserve, not stated) or "note", and a sentence.
    """
    found = []
    for resin, grams in _needed(bill).items():
        held = loaded.get(resin, Loaded())
        if held.grams is None:
            found.append(("warn", f"{resin}: {grams:.0f} g needed; what is loaded is not stated."))
        elif held.grams < grams:
            short = grams - held.grams
            found.append(
                (
                    "stop",
                    f"{resin}: {held.grams:.0f} g loaded, {grams:.0f} g needed; {short:.0f} g too "
                    "little.",
                )
            )
        elif held.grams < (1 + RESERVE) * grams:
            found.append(
                (
                    "warn",
                    f"{resin}: {held.grams:.0f} g loaded for {grams:.0f} g; less than "
                    f"{100 * RESERVE:.0f} % in reserve.",
                )
            )
        if held.expiry is not None and held.expiry < day:
            found.append(("stop", f"{resin}: expired on {held.expiry.isoformat()}."))
        if not held.lot:
            found.append(("note", f"{resin}: no lot is stated."))
    assumed = sorted({r.resin for r in bill if r.density_assumed})
    if assumed:
        found.append(
            ("note", f"Density of {', '.join(assumed)} is assumed, so its grams are indicative.")
        )
    order = ("stop", "warn", "note")
    return sorted(found, key=lambda w: order.index(w[0]))


def write_ticket(
    stack: Stack,
    path: str | Path,
    *,
    loaded: Mapping[str, Loaded] | None = None,
    day: date,
    findings: Sequence[Finding] | None = None,
    occupancy: Occupancy | None = None,
    monitor: Monitor = SILENT,
) -> list[tuple[str, str]]:
    """Write the ticket of a stack.

    Parameters
    ----------
    stack : Stack
    path : str or Path
        The HTML page; on A4 it is one page.
    loaded : mapping, optional
        Resin to `Loaded`.
    day : date
        On which the ticket is made; resins that expired before are refused.
    findings : sequence of Finding, optional
        Of the preflight; the page says whether the stack may be printed. None where it was not
        checked.
    occupancy : Occupancy, optional
        As `voxelmat.printing.occupancy.gather` finds it; the stack is read if left out.
    monitor : Monitor

    Returns
    -------
    list of (str, str)
        The warnings on the page.

    Raises
    ------
    InputError
        If `loaded` names a resin that the stack does not lay.
    ResourceError
        If the page cannot be written.
    """
    held = dict(loaded or {})
    resins = list(dict.fromkeys(c.resin for c in stack.channels))
    for resin in held:
        if resin not in resins:
            raise InputError(
                f"The stack lays no '{resin}'; it lays {', '.join(resins)}.", key="loaded"
            )
    seen = gather(stack, monitor=monitor) if occupancy is None else occupancy
    figures = estimate(stack, occupancy=seen)
    warnings = ticket_warnings(figures.bill, held, day)
    if findings is None:
        warnings.insert(0, ("warn", "The stack was not checked when this ticket was made."))
    elif any(f.severity == "stop" for f in findings):
        warnings.insert(0, ("stop", "The check of the stack says: do not print."))
    if figures.invented:
        warnings.append(("note", "The profile is invented: no real printer's figures."))
    text = page(
        "ticket.html.j2",
        **_context(stack, figures, held, day, warnings),
        tray=tray_drawing(stack),
        shadow=shadow_drawing(stack, seen.above),
    )
    write_text(Path(path), text)
    return warnings


def page(template: str, **context: Any) -> str:
    """A page from a template of this package."""
    environment = Environment(
        loader=PackageLoader("voxelmat.workflow", "templates"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
    )
    return environment.get_template(template).render(context)


def _cut(text: str) -> str:
    return text if len(text) <= _LONG else text[: _LONG - 1] + "…"


def _context(
    stack: Stack,
    figures: PrintEstimate,
    held: Mapping[str, Loaded],
    day: date,
    warnings: Sequence[tuple[str, str]],
) -> dict[str, Any]:
    notes = stack.manifest["notes"]
    printing = [t - figures.warm_up_s - figures.cool_down_s for t in figures.time_s]
    size = [n * p for n, p in zip(stack.shape, stack.pitch_mm, strict=True)]
    parts = [_cut(p.name) for p in stack.parts]
    facts = {
        "printer": stack.profile.name,
        "size on the tray": f"{size[0]:.1f} x {size[1]:.1f} x {size[2]:.1f} mm",
        "layers": f"{figures.layers} of {stack.pitch_mm[2] * 1000:.4g} µm",
        "passes": f"{figures.passes_in_all:.0f}, up to {figures.passes} a layer",
        "printing": _hours(printing),
        "with warm-up and cool-down": _hours(figures.time_s),
        "files": f"{figures.file_bytes / 1e6:.3g} MB in folder '{_cut(stack.folder.name)}'",
    }
    if figures.cost is not None:
        low, high = figures.cost
        facts["cost"] = f"{number(low)} to {number(high)} {figures.cost_unit}"
    return {
        "job": _cut(str(notes.get("job_number", "") or "no job number")),
        "title": _cut(str(notes.get("title", "") or ", ".join(parts[:3]))),
        "digest": stack.manifest["job"][:16],
        "day": day.isoformat(),
        "facts": facts,
        "parts": parts[:_NAMED],
        "more_parts": max(0, len(parts) - _NAMED),
        "resins": [_resin(row, held.get(row.resin, Loaded()), day) for row in figures.bill],
        "stops": _said(warnings, "stop"),
        "warns": _said(warnings, "warn"),
        "notes": _said(warnings, "note"),
        "cleaning": _CLEANING,
        "cautions": _CAUTIONS,
        "machine_support": figures.support_mm3 is None,
    }


def _said(warnings: Sequence[tuple[str, str]], kind: str) -> list[str]:
    said = [text for k, text in warnings if k == kind]
    more = [f"And {len(said) - _NAMED} more."] if len(said) > _NAMED else []
    return said[:_NAMED] + more


def _hours(span: Sequence[float]) -> str:
    low, high = span
    return f"{number(low / 3600)} to {number(high / 3600)} h"


def _resin(row: BillRow, held: Loaded, day: date) -> dict[str, str]:
    too_little = held.grams is not None and held.grams < row.needed_g
    expired = held.expiry is not None and held.expiry < day
    return {
        "channels": ", ".join(row.channels),
        "resin": _cut(row.resin),
        "role": row.role,
        "printed": number(row.printed_g),
        "waste": number(row.waste_g),
        "purge": number(row.purge_g),
        "needed": number(row.needed_g),
        "loaded": "" if held.grams is None else f"{held.grams:.0f}",
        "lot": _cut(held.lot),
        "expiry": "" if held.expiry is None else held.expiry.isoformat(),
        "fault": ", ".join(["too little"] * too_little + ["expired"] * expired),
    }

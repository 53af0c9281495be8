"""Shell commands of the print room: ticket, proof print, print record."""

from __future__ import annotations

import math
from collections.abc import Sequence
from datetime import date, datetime
from pathlib import Path
from typing import Any

from voxelmat.errors import InputError
from voxelmat.io.materials import load_library
from voxelmat.monitor import Monitor
from voxelmat.printing.bill import write_bom_csv
from voxelmat.printing.crop import proof_crop
from voxelmat.printing.estimate import estimate
from voxelmat.printing.occupancy import gather
from voxelmat.printing.preflight import preflight
from voxelmat.printing.proof import worst_place, write_proof
from voxelmat.printing.readback import Stack, read_stack
from voxelmat.printing.record import (
    Measured,
    PrintRecord,
    append_record,
    read_records,
    record_path,
)
from voxelmat.units import number
from voxelmat.workflow.ticket import Loaded, write_ticket

__all__ = ["proof", "record", "ticket"]

Answer = tuple[int, dict[str, Any], str]


def _pairs(given: Sequence[str], word: str, form: str) -> dict[str, str]:
    """``name=value`` words as a mapping."""
    found: dict[str, str] = {}
    for text in given:
        name, sign, value = text.partition("=")
        if not (sign and name.strip() and value.strip()):
            raise InputError(f"{word} takes {form}; got {text!r}.", key=word)
        if name.strip() in found:
            raise InputError(f"{word} is given twice for '{name.strip()}'.", key=word)
        found[name.strip()] = value.strip()
    return found


def _number(text: str, word: str, what: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not math.isfinite(value):
        raise InputError(f"{what[:1].upper()}{what[1:]} is a number; got {text!r}.", key=word)
    return value


def parse_day(text: str, word: str) -> date:
    """A day, or `InputError` naming the word that gave it."""
    try:
        return date.fromisoformat(text)
    except ValueError:
        raise InputError(f"A day is written as 2026-12-01; got {text!r}.", key=word) from None


def _today() -> date:
    return datetime.now().astimezone().date()


def _beside(stack: Stack, ending: str) -> Path:
    folder = stack.folder.absolute()
    return folder.with_name(folder.name + ending)


def ticket(
    *,
    stack: Path,
    out: Path | None,
    bom: Path | None,
    loaded: Sequence[str],
    lot: Sequence[str],
    expiry: Sequence[str],
    no_check: bool,
    monitor: Monitor,
) -> Answer:
    """The job ticket as a page and the bill of materials as CSV; 1 where it says stop."""
    grams = {
        r: _number(t, "--loaded", f"what is loaded of '{r}'")
        for r, t in _pairs(loaded, "--loaded", "RESIN=GRAMS").items()
    }
    lots = _pairs(lot, "--lot", "RESIN=LOT")
    days = {
        r: parse_day(t, "--expiry")
        for r, t in _pairs(expiry, "--expiry", "RESIN=YYYY-MM-DD").items()
    }
    held = {
        r: Loaded(grams=grams.get(r), lot=lots.get(r, ""), expiry=days.get(r))
        for r in (*grams, *lots, *days)
    }
    opened = read_stack(stack)
    findings = None if no_check else preflight(opened, monitor=monitor)
    target = _beside(opened, ".ticket.html") if out is None else out
    seen = gather(opened, monitor=monitor)
    warnings = write_ticket(
        opened, target, loaded=held, day=_today(), findings=findings, occupancy=seen
    )
    figures = estimate(opened, occupancy=seen)
    table = write_bom_csv(figures.bill, _beside(opened, ".bom.csv") if bom is None else bom)
    low, high = (t / 3600 for t in figures.time_s)
    lines = [
        f"ticket: {target}",
        f"bill of materials: {table}",
        f"  {figures.layers} layers, {number(low)} to {number(high)} h with warm-up and cool-down",
        *(
            f"  {row.resin}: {number(row.needed_g)} g needed, {number(row.purge_g)} g of it purge"
            for row in figures.bill
        ),
        *(f"  {kind}: {text}" for kind, text in warnings),
    ]
    data = {
        "ticket": str(target),
        "bill_of_materials": str(table),
        "time_s": list(figures.time_s),
        "needed_g": {row.resin: row.needed_g for row in figures.bill},
        "warnings": [{"severity": kind, "message": text} for kind, text in warnings],
    }
    return (1 if any(kind == "stop" for kind, _ in warnings) else 0), data, "\n".join(lines)


def proof(
    *,
    stack: Path,
    out: Path | None,
    first: bool,
    height_mm: float,
    minutes: float,
    monitor: Monitor,
) -> Answer:
    """A proof print round the worst finding of the preflight, or of the lowest layers."""
    opened = read_stack(stack)
    found = None if first else worst_place(preflight(opened, monitor=monitor))
    crop = proof_crop(opened, found, height_mm=height_mm, limit_s=60 * minutes)
    target = _beside(opened, "-proof") if out is None else out
    made = write_proof(opened, target, crop, monitor=monitor)
    figures = estimate(made, monitor=monitor)
    around = (figures.warm_up_s + figures.cool_down_s) / 60
    lines = [
        f"proof print: {target}",
        f"  {crop.why}",
        f"  at most {number(crop.time_s / 60)} min of printing, and {number(around)} min of "
        "warm-up and cool-down",
    ]
    if found is not None:
        lines.append(f"  {found.severity}: {found.message}")
    data = {
        "proof": str(target),
        "why": crop.why,
        "layers": list(crop.layers),
        "rows": list(crop.rows),
        "columns": list(crop.columns),
        "printing_s": crop.time_s,
        "finding": None if found is None else found.code,
    }
    return 0, data, "\n".join(lines)


def record(
    *,
    stack: Path,
    operator: str | None,
    started: str | None,
    lot: Sequence[str],
    abort_layer: int | None,
    mass_g: float | None,
    with_support: bool,
    measured: Sequence[str],
    note: str,
    file: Sequence[Path],
    monitor: Monitor,
) -> Answer:
    """Append a print record, or list the records; 1 where a mass is outside its band."""
    del monitor  # done in an instant
    opened = read_stack(stack)
    if operator is None:
        given = (started, abort_layer, mass_g, note or None, lot or None, measured or None)
        if any(g is not None for g in given) or with_support:
            raise InputError("A record needs --operator, a role or initials.", key="--operator")
        return _listed(opened)
    entry = PrintRecord(
        operator=operator,
        started=started or datetime.now().astimezone().isoformat(timespec="minutes"),
        lots=_pairs(lot, "--lot", "RESIN=LOT"),
        abort_layer=abort_layer,
        mass_g=mass_g,
        with_support=with_support,
        measured=tuple(_dimension(n, t) for n, t in _pairs(measured, "--measured", _FORM).items()),
        note=note,
    )
    findings = append_record(opened, entry, materials=load_library(file))
    path = record_path(opened)
    data = {
        "record": str(path),
        "findings": [
            {"severity": f.severity, "code": f.code, "message": f.message} for f in findings
        ],
    }
    lines = [f"noted in {path}", *(f"  {f.severity}: {f.message} {f.remedy}" for f in findings)]
    return (1 if any(f.severity != "note" for f in findings) else 0), data, "\n".join(lines)


_FORM = "NAME=DESIGN:MEASURED"


def _dimension(name: str, text: str) -> Measured:
    nominal, sign, found = text.partition(":")
    if not sign:
        raise InputError(f"--measured takes {_FORM}, in mm; got '{name}={text}'.", key="--measured")
    return Measured(
        name=name,
        nominal_mm=_number(nominal, "--measured", f"the design of '{name}'"),
        measured_mm=_number(found, "--measured", f"the measure of '{name}'"),
    )


def _listed(stack: Stack) -> Answer:
    entries, faults = read_records(stack)
    lines = [f"{len(entries)} records of {stack.folder.name}"]
    for entry in entries:
        found = entry["record"]
        bits = [f"  {found.get('started')} {found.get('operator')}"]
        if found.get("abort_layer") is not None:
            bits.append(f"stopped after {found['abort_layer']} layers")
        if found.get("mass_g") is not None:
            bits.append(f"{found['mass_g']:g} g")
        for size in found.get("measured", []):
            off = size["measured_mm"] - size["nominal_mm"]
            bits.append(f"{size['name']} {size['measured_mm']:g} mm ({off:+.3g})")
        bits += [f"{f['severity']}: {f['code']}" for f in entry.get("findings", [])]
        if entry.get("job") != stack.manifest["job"]:
            bits.append("of another stack that was here before")
        lines.append("; ".join(bits))
    lines += [f"  fault: {text}" for text in faults]
    return (1 if faults else 0), {"records": entries, "faults": faults}, "\n".join(lines)

"""The short answer of a run: one verdict a requirement, an exit code, plain data, a few lines."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

from voxelmat.model.requirement import Verdict
from voxelmat.printing.readback import Stack
from voxelmat.units import number, quantity
from voxelmat.workflow.finding_words import checked_dict
from voxelmat.workflow.report_data import RunData
from voxelmat.workflow.report_optimised import optimised_lines

__all__ = ["as_dict", "exit_code", "joined_verdicts", "summary_lines"]


def joined_verdicts(designed: Sequence[Verdict], printed: Sequence[Verdict]) -> tuple[Verdict, ...]:
    """The verdicts on the design, each checked against the same one on the stack read back.

    Where the two differ there is no answer: the halftone moved the value across the limit, or
    made it doubtful.
    """
    joined = []
    for first, second in zip(designed, printed, strict=True):
        if first.status == second.status:
            joined.append(first)
            continue
        unit = first.requirement.unit
        reason = (
            f"as designed {quantity(first.value, unit)} ({first.status}), as printed "
            f"{quantity(second.value, unit)} ({second.status})"
        )
        joined.append(replace(first, status="cannot be said", reasons=(*first.reasons, reason)))
    return tuple(joined)


def exit_code(data: RunData) -> int:
    """0 all met, 1 one not met or a finding that says stop, 2 one cannot be said."""
    states = Counter(v.status for v in data.verdicts)
    if states["not met"] or any(f.severity == "stop" for f in data.findings):
        return 1
    return 2 if states["cannot be said"] else 0


def _plain(value: float) -> float | None:
    return value if math.isfinite(value) else None


def as_dict(
    data: RunData,
    *,
    stack: Stack | None,
    report: Path | None,
    folder: Path,
    papers: Mapping[str, Path] | None = None,
) -> dict[str, Any]:
    """Plain data for JSON; keys carry their unit, and what is not a number is null."""
    return {
        "design": data.name,
        "folder": str(folder),
        "report": str(report) if report is not None else None,
        "stack": str(stack.folder) if stack is not None else None,
        "papers": {what: str(path) for what, path in (papers or {}).items()},
        "part": {
            "digest": data.part.digest,
            "voxels": list(data.part.grid.shape),
            "solid_voxels": int(data.part.solid.sum()),
            "spacing_mm": list(data.part.grid.spacing),
            "volume_mm3": data.part.volumes(),
            "mass_g": {k: v * 1e6 for k, v in data.part.masses().items()},
        },
        "load_cases": {
            name: {
                "largest_displacement_mm": float(r.size.max()),
                "energy_mJ": r.energy,
                "largest_strain": r.largest_strain.value,
                "largest_rotation_rad": r.largest_rotation.value,
                "force_balance": r.balance,
                "iterations": r.iterations,
                "residual": r.residual,
                "estimated_energy_error": (
                    data.energy_error[name].share if name in data.energy_error else None
                ),
                "estimated_displacement_error": (
                    _plain(data.grid_error[name].displacement_error)
                    if name in data.grid_error
                    else None
                ),
                "as_printed_largest_displacement_mm": (
                    float(data.as_printed[name].size.max()) if name in data.as_printed else None
                ),
                "as_printed_energy_mJ": (
                    data.as_printed[name].energy if name in data.as_printed else None
                ),
            }
            for name, r in data.results.items()
        },
        "optimised": None
        if data.optimised is None
        else {
            "objective": data.optimised.objective,
            "objective_name": data.optimised.objective_name,
            "iterations": data.optimised.iterations,
            "reason": data.optimised.reason,
            "limits_met": data.optimised.feasible,
            "values": [
                {
                    "name": s.name,
                    "unit": s.unit,
                    "sense": s.sense,
                    "limit": s.limit,
                    "as_optimised": _plain(s.optimised),
                    "as_a_part": _plain(s.palette),
                    "as_printed": None if s.printed is None else _plain(s.printed),
                }
                for s in data.optimised.stages
            ],
            "palette": len(data.part.palette) - 1,
            "prices": [
                {"name": p.name, "limit": p.limit, "unit": p.unit, "objective_per_unit": p.slope}
                for p in data.optimised.prices
            ],
        },
        "verdicts": [
            {
                "requirement": v.requirement.name,
                "status": v.status,
                "value": _plain(v.value),
                "low": _plain(v.low),
                "high": _plain(v.high),
                "at_least": v.requirement.at_least,
                "at_most": v.requirement.at_most,
                "unit": v.requirement.unit,
                "margin": _plain(v.margin),
                "reasons": list(v.reasons),
            }
            for v in data.verdicts
        ],
        **checked_dict(data.findings, data.outline, data.inspection),
        "cautions": list(data.cautions),
        "notes": list(data.notes),
        "timings_s": {k: round(v, 3) for k, v in data.timings.items()},
    }


def summary_lines(
    data: RunData, *, stack: Stack | None, report: Path | None, folder: Path
) -> list[str]:
    """A few lines for the end of a run in a shell."""
    part = data.part
    n = part.grid.shape
    lines = [
        f"{data.name}: {int(part.solid.sum()):,} solid voxels in {n[0]} x {n[1]} x {n[2]}, "
        f"{quantity(part.mass * 1e6, 'g')}"
    ]
    for name, result in data.results.items():
        line = f"  {name}: moves {quantity(float(result.size.max()), 'mm')} at most"
        if name in data.as_printed:
            again = float(data.as_printed[name].size.max())
            line += f", {quantity(again, 'mm')} as printed"
        lines.append(line)
    if data.optimised is not None:
        lines += optimised_lines(data.optimised)
    for v in data.verdicts:
        value = quantity(v.value, v.requirement.unit)
        lines.append(f"  {v.status:<14}  {v.requirement.name}: {value}")
        if v.status == "cannot be said" and v.reasons:
            lines.append(f"                  because {v.reasons[0]}")
    if data.checked:
        count = Counter(f.severity for f in data.findings)
        told = ", ".join(f"{count[s]} {s}" for s in ("stop", "warn", "note") if count[s])
        lines.append(f"  preflight: {told or 'nothing found'}")
        lines += [f"    {f.severity}: {f.message}" for f in data.findings if f.severity == "stop"]
    if data.timings:
        total = sum(data.timings.values())
        slow = ", ".join(f"{k} {number(t)} s" for k, t in data.timings.items() if t >= 0.5)
        lines.append(f"  took {number(total)} s ({slow})")
    if stack is not None:
        lines.append(f"  stack:  {stack.folder}")
    if report is not None:
        lines.append(f"  report: {report}")
    else:
        lines.append(f"  results: {folder / 'result.json'}")
    return lines

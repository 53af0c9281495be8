"""What a report says of an optimisation: three values of everything asked, and prices of limits."""

from __future__ import annotations

from typing import Any

from voxelmat.model.design_result import DesignResult
from voxelmat.model.design_stages import StagedValue, shown
from voxelmat.units import number
from voxelmat.workflow.report_tables import Table

__all__ = ["optimised_lines", "optimised_section"]


def optimised_section(design: DesignResult) -> dict[str, Any]:
    """Words, a table of the values, prices and notes, for the page."""
    words = (
        f"The layout was optimised in {design.iterations} iterations: {design.objective_name} "
        f"{number(design.objective)} {design.objective_unit}".rstrip()
        + f", and {number(design.objective_of_palette)} with the blends that are printed. "
        f"It stopped because: {design.reason}."
    )
    if not design.converged:
        words += " It had not converged: more iterations may give a better layout."
    return {
        "words": words,
        "limits": _table(design),
        "prices": tuple(p.sentence for p in design.prices),
        "notes": design.notes,
    }


def _table(design: DesignResult) -> Table | None:
    if not design.stages:
        return None
    return Table(
        head=("asked for", "limit", "unit", "as optimised", "as a part", "as printed", "kept"),
        rows=tuple(_row(s) for s in design.stages),
        numbers=(1, 3, 4, 5),
        caption="as a part: with its palette and outline, solved again; as printed: halftoned, "
        "read back, averaged and solved again",
    )


def _row(s: StagedValue) -> tuple[str, ...]:
    unit = shown(0.0, s.unit)[1]
    cells = [number(shown(v, s.unit)[0]) for v in (s.optimised, s.palette)]
    cells.append("" if s.printed is None else number(shown(s.printed, s.unit)[0]))
    last = s.palette if s.printed is None else s.printed
    if s.limit is None:
        return f"{s.sense} {s.name}", "", unit, *cells, ""
    limit = number(shown(s.limit, s.unit)[0])
    return f"{s.name}, {s.sense}", limit, unit, *cells, "yes" if s.met(last) else "no"


def optimised_lines(design: DesignResult) -> list[str]:
    """The same in a few lines for a shell."""
    lines = [f"  optimised: {design.reason}"]
    for s in design.stages:
        what, limit, unit, *cells, kept = _row(s)
        asked = f" {limit}" if limit else ""
        printed = f", {cells[2]} as printed" if cells[2] else ""
        lines.append(
            f"    {what}{asked}: {cells[0]} as optimised, {cells[1]} as a part{printed} {unit}"
            + ("" if kept in ("", "yes") else "  NOT kept")
        )
    lines += [f"    {r}" for s in design.stages for r in s.remarks]
    return lines + [f"    {p.sentence}" for p in design.prices]

"""What the checks of a stack found, as tables and pictures of the report."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

from voxelmat.model.deviation import OutlineDeviation
from voxelmat.model.inspection import InspectionSheet
from voxelmat.units import number
from voxelmat.workflow import report_tables as tables
from voxelmat.workflow.report_canvas import Picture
from voxelmat.workflow.report_data import RunData
from voxelmat.workflow.report_tables import Table

__all__ = ["checks"]

_SEVERITY_WORDS = {"stop": "do not print", "warn": "look first", "note": "good to know"}


def checks(run: RunData) -> dict[str, Any]:
    """Findings, outline and inspection of a run, each None where there is none."""
    return {
        "findings": _findings(run),
        "pictures": _pictures(run),
        "outline": None if run.outline is None else _outline(run.outline),
        "outline_words": "" if run.outline is None else _outline_words(run.outline),
        "inspection": None if run.inspection is None else _inspection(run.inspection),
    }


def _findings(run: RunData) -> Table | None:
    if not run.findings:
        return None
    rows = []
    parts = any(f.part for f in run.findings)
    for n, finding in enumerate(run.findings):
        where = tables.place(finding.place_mm) if finding.place_mm else ""
        mended = f" May be mended by the repair '{finding.fix}'." if finding.fix else ""
        rows.append(
            (
                f"{n + 1}",
                _SEVERITY_WORDS[finding.severity],
                finding.code,
                finding.message,
                *((finding.part,) if parts else ()),
                where,
                finding.remedy + mended,
            )
        )
    return Table(
        head=(
            "",
            "how bad",
            "check",
            "what was found",
            *(("part",) if parts else ()),
            "where, mm",
            "what to do",
        ),
        rows=tuple(rows),
        caption="Repairs that are safe: voxelmat preflight STACK --design DESIGN.toml --fix."
        if any(f.fix for f in run.findings)
        else "",
    )


def _pictures(run: RunData) -> list[Picture]:
    """The pictures of the findings, numbered as in the table."""
    return [
        replace(p, alt=f"Finding {n + 1}: {p.alt}", caption=f"Finding {n + 1}: {p.caption}")
        for n, p in run.finding_pictures.items()
    ]


def _outline(seen: OutlineDeviation) -> Table:
    return Table(
        head=tuple(h.replace("um", "µm") for h in seen.HEAD),
        rows=tuple(tuple(row) for row in seen.rows()),
        numbers=(1, 2, 3, 4, 5),
        caption="Above zero the stack is larger than the design. Each resin's row holds the "
        "outline that its droplets form.",
    )


def _outline_words(seen: OutlineDeviation) -> str:
    kept = "lies within both" if seen.within else "lies beyond"
    return (
        f"The outline of {seen.layers} layers was compared with {seen.against}. Rounding to whole "
        "sites and chords between voxel centres explain deviations of up to "
        f"{number(1000 * seen.limit_p95)} µm for 95 % of the outline and "
        f"{number(1000 * seen.limit_largest)} µm for all of it; the outline {kept}."
    )


def _inspection(sheet: InspectionSheet) -> Table:
    return Table(
        head=tuple(sheet.HEAD),
        rows=tuple(tuple(row) for row in sheet.cells()),
        numbers=(2, 3, 4, 5, 6),
        caption=f"{sheet.title}, as laid in the bitmaps: before curing, shrinkage and cleaning. "
        "The uncertainty (coverage factor 2) is that of rounding to whole sites.",
    )

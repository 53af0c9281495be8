"""Findings, outlines and inspections as plain data for JSON and as lines for a terminal."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from voxelmat.model.deviation import OutlineDeviation
from voxelmat.model.finding import Finding
from voxelmat.model.inspection import InspectionSheet
from voxelmat.units import number

__all__ = ["checked_dict", "checked_lines", "finding_dict", "finding_lines", "outline_dict"]


def finding_dict(finding: Finding) -> dict[str, Any]:
    """One finding as plain data, its place in mm of its part."""
    return {
        "severity": finding.severity,
        "code": finding.code,
        "message": finding.message,
        "part": finding.part,
        "place_mm": None if finding.place_mm is None else list(finding.place_mm),
        "remedy": finding.remedy,
        "fix": finding.fix,
        "value": finding.value,
        "limit": finding.limit,
        "unit": finding.unit,
    }


def finding_lines(finding: Finding) -> list[str]:
    """One finding for a terminal: what and where, then what to do."""
    where = f" of '{finding.part}'" if finding.part else ""
    if finding.place_mm is not None:
        where = f" at {', '.join(map(number, finding.place_mm))} mm{where}"
    elif finding.part:
        where = f" ('{finding.part}')"
    lines = [f"  {finding.severity}: {finding.message}{where}"]
    if finding.remedy:
        lines.append(f"        {finding.remedy}")
    if finding.fix:
        lines.append(f"        may be mended: {finding.fix} (--fix)")
    return lines


def outline_dict(outline: OutlineDeviation) -> dict[str, Any]:
    """How far an outline lies off, the whole first, then each resin's."""
    return {
        "against": outline.against,
        "layers": outline.layers,
        "limit_p95_mm": outline.limit_p95,
        "limit_largest_mm": outline.limit_largest,
        "rows": [
            {
                "of": row.name,
                "points": row.points,
                "mean_mm": row.mean,
                "rms_mm": row.rms,
                "p95_mm": row.p95,
                "largest_mm": row.largest,
                "place_mm": list(row.place_mm),
            }
            for row in (outline.whole, *outline.channels)
        ],
    }


def checked_dict(
    findings: Sequence[Finding],
    outline: OutlineDeviation | None = None,
    inspection: InspectionSheet | None = None,
) -> dict[str, Any]:
    """Findings, outline and inspection as plain data; None where there is none."""
    return {
        "findings": [finding_dict(f) for f in findings],
        "outline": None if outline is None else outline_dict(outline),
        "inspection": None
        if inspection is None
        else [
            {
                "dimension": row.dimension.name,
                "kind": row.dimension.kind,
                "unit": row.dimension.unit,
                "nominal": row.dimension.nominal,
                "measured": row.measured,
                "uncertainty_k2": row.uncertainty,
                "state": row.state,
                "note": row.note,
            }
            for row in inspection
        ],
    }


def checked_lines(
    findings: Sequence[Finding],
    outline: OutlineDeviation | None = None,
    inspection: InspectionSheet | None = None,
) -> list[str]:
    """The same for a terminal."""
    lines = [line for f in findings for line in finding_lines(f)]
    if not findings:
        lines.append("  nothing found")
    if outline is not None:
        lines += [f"  {line}" for line in outline.text().splitlines()]
    if inspection is not None:
        lines += [f"  {line}" for line in inspection.text().splitlines()]
    return lines

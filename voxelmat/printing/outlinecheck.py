"""What preflight says of an outline that lies off, and of resins or parts that are shifted."""

from __future__ import annotations

from voxelmat.model.deviation import ChannelOutline, OutlineDeviation
from voxelmat.model.finding import Finding

__all__ = ["outline_findings"]


def outline_findings(seen: OutlineDeviation) -> list[Finding]:
    """Findings on the outline of one part."""
    found = []
    together = {row.shift for row in seen.channels} == {seen.whole.shift}
    if any(seen.whole.shift) and together:
        found.append(_shift_finding("stack shifted", "The whole stack", seen.whole))
    else:
        found += [
            _shift_finding("channel shifted", f"The outline of '{row.name}'", row)
            for row in seen.channels
            if any(row.shift)
        ]
    if not seen.within and not found:
        found.append(_off(seen))
    return found


def _shift_finding(code: str, what: str, row: ChannelOutline) -> Finding:
    layers, rows, columns = row.shift
    return Finding(
        severity="stop",
        code=code,
        message=f"{what} is shifted by {columns} columns, {rows} rows and {layers} layers: "
        f"{100 * (1 - row.fit):.2g} % of {row.points} points of the outline lie on the wrong side "
        "of the design's, and moved back they fit.",
        place_mm=row.place_mm,
        remedy="Write the stack again; do not move images.",
    )


def _off(seen: OutlineDeviation) -> Finding:
    whole = seen.whole
    return Finding(
        severity="warn",
        code="outline",
        message=f"The outline lies up to {1000 * whole.largest:.0f} um off {seen.against}, 95 % of "
        f"it within {1000 * whole.p95:.0f} um; rounding explains {1000 * seen.limit_largest:.0f} "
        f"and {1000 * seen.limit_p95:.0f} um.",
        place_mm=whole.place_mm,
        remedy="Look there; finer design voxels draw edges and small features better.",
        value=1000 * whole.largest,
        limit=1000 * seen.limit_largest,
        unit="um",
    )

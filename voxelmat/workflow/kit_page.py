"""The printable measuring sheet of a test print kit."""

from __future__ import annotations

from pathlib import Path

from voxelmat.io.atomic import write_text
from voxelmat.printing.kit_rows import FACTORS, KitPlan
from voxelmat.workflow.ticket import page
from voxelmat.workflow.topview import kit_drawing

__all__ = ["write_kit_page"]

_ACROSS = {
    "x": "length of the bar along x",
    "y": "length of the bar along y",
    "z": "height of the bar from the tray",
}


def write_kit_page(plan: KitPlan, path: Path) -> Path:
    """Write the sheet as HTML, with the numbers of the rows of ``sheet.csv``.

    Raises
    ------
    ResourceError
        If the file cannot be written.
    """
    series: dict[str, list[tuple[int, str]]] = {}
    dimensions, others = [], []
    for number, row in enumerate(plan.rows, 1):
        size = f"{row.nominal_mm:.4g}"
        if row.kind == "dimension":
            dimensions.append((number, _ACROSS[row.axis], size))
        elif row.kind == "blend":
            others.append((number, f"block with {100 * row.nominal_mm:.0f} % of the soft resin"))
        elif row.kind == "peel":
            others.append((number, "peel tab: pull the free end straight up, slowly"))
        else:
            series.setdefault(f"{row.kind} {row.axis}".strip(), []).append((number, size))
    text = page(
        "kit.html.j2",
        profile=plan.profile.name,
        kit=plan.digest[:12],
        size=" x ".join(f"{s:.1f}" for s in plan.size_mm) + " mm",
        drawing=kit_drawing(plan),
        columns=FACTORS,
        series=list(series.items()),
        dimensions=dimensions,
        others=others,
    )
    write_text(path, text)
    return path

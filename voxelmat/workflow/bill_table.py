"""The bill of materials as a table of the report."""

from __future__ import annotations

from collections.abc import Sequence

from voxelmat.printing.bill import BillRow
from voxelmat.units import number
from voxelmat.workflow.report_tables import Table

__all__ = ["bill_table"]


def bill_table(rows: Sequence[BillRow]) -> Table:
    """What of each resin is printed, lost, flushed and needed in all; costs where known."""
    priced = any(r.cost is not None for r in rows)
    head = ["resin", "channels", "printed, g", "waste, g", "purge, g", "needed, g", "droplets"]
    unit = next((r.cost_unit for r in rows if r.cost is not None), "")
    if priced:
        head.append(f"cost, {unit}")
    lines = []
    for row in rows:
        grams = (row.printed_g, row.waste_g, row.purge_g, row.needed_g)
        line = [row.resin, ", ".join(row.channels), *(number(g) for g in grams)]
        line.append(number(row.droplets))
        if priced:
            line.append("not known" if row.cost is None else number(row.cost))
        lines.append(tuple(line))
    assumed = [r.resin for r in rows if r.density_assumed]
    caption = "Bill of materials."
    if assumed:
        density = next(r.density_g_cm3 for r in rows if r.density_assumed)
        caption += f" Density of {', '.join(assumed)} assumed: {number(density)} g/cm³."
    return Table(
        head=tuple(head),
        rows=tuple(lines),
        caption=caption,
        numbers=tuple(range(2, len(head))),
    )

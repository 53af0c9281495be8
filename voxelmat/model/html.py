"""Tables that parts show of themselves in a notebook."""

from __future__ import annotations

from html import escape
from typing import TYPE_CHECKING

import numpy as np

from voxelmat.units import number

if TYPE_CHECKING:
    from voxelmat.model.part import Part

__all__ = ["part_table", "table"]


def table(head: list[str], rows: list[list[str]], caption: str = "") -> str:
    """An HTML table; the first column is text, the others are right-aligned numbers."""
    cells = "".join(
        f'<th scope="col" style="text-align:{"left" if c == 0 else "right"}">{escape(h)}</th>'
        for c, h in enumerate(head)
    )
    body = "".join(
        "<tr>"
        + "".join(
            f'<td style="text-align:{"left" if c == 0 else "right"}">{escape(v)}</td>'
            for c, v in enumerate(row)
        )
        + "</tr>"
        for row in rows
    )
    top = f"<caption>{escape(caption)}</caption>" if caption else ""
    return f"<table>{top}<thead><tr>{cells}</tr></thead><tbody>{body}</tbody></table>"


def part_table(part: Part) -> str:
    """Counts, volumes and masses by resin, with the grid above and the outline below."""
    volumes, masses = part.volumes(), part.masses()
    rows = [
        [name, number(volumes[name]), number(masses[name] * 1e6), part.resin(name).E.source]
        for name in volumes
    ]
    rows.append(["all", number(sum(volumes.values())), number(part.mass * 1e6), ""])
    n, h = part.grid.shape, part.grid.spacing
    count = int(np.count_nonzero(part.labels))
    caption = (
        f"{part.name}: {n[0]} x {n[1]} x {n[2]} voxels of {h[0]:g} x {h[1]:g} x {h[2]:g} mm, "
        f"{count:,} with material, {len(part.palette) - 1} palette entries"
    )
    grams = table(["resin", "volume, mm³", "mass, g", "source of E"], rows, caption)
    return f"{grams}<p>Outline: {escape(part.outline)}.</p>"

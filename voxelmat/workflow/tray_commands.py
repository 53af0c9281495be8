"""Shell commands for trays: ``voxelmat tray`` and ``voxelmat orientations``."""

from __future__ import annotations

from html import escape
from pathlib import Path
from typing import TYPE_CHECKING, Any

from voxelmat.io.atomic import write_text
from voxelmat.monitor import Monitor
from voxelmat.units import number, quantity
from voxelmat.workflow.finding_words import checked_lines

if TYPE_CHECKING:
    from voxelmat.workflow.traying import TrayResult

__all__ = ["orientations", "tray"]

Answer = tuple[int, dict[str, Any], str]


def tray(*, tray: Path, out: Path, workers: int, scheduler: str | None, monitor: Monitor) -> Answer:
    """Lay out, write, read back and check a tray.

    Parameters
    ----------
    tray : Path
        The tray file.
    out : Path
        Folder for the stack, the picture and ``tray.json``.
    workers, scheduler
        As for `voxelmat.printing.stack.write_job`.

    Returns
    -------
    tuple
        Exit code, plain data, text.
    """
    from voxelmat.workflow.traying import run_tray  # loads the slicer

    result = run_tray(tray, out, workers=workers, scheduler=scheduler, monitor=monitor)
    return result.exit_code, result.as_dict(), "\n".join(_lines(result))


def orientations(
    *, design: Path, out: Path, order: str, turns: bool, html: Path | None, monitor: Monitor
) -> Answer:
    """Compare the orientations of a design's part.

    Parameters
    ----------
    design : Path
    out : Path
        Folder of the design's run; its part is taken if there is one.
    order : str
        One of `voxelmat.printing.orient.ORDERS`.
    turns : bool
        Twelve orientations instead of six.
    html : Path or None
        Where the table goes as a page.

    Returns
    -------
    tuple
        Exit code, plain data, text.
    """
    from voxelmat.printing.orient import compare_orientations  # loads the slicer
    from voxelmat.workflow.trayparts import printed_part

    part, profile = printed_part(design, out, monitor=monitor)
    found = compare_orientations(part, profile, order=order, turns=turns, monitor=monitor)
    if html is not None:
        page = (
            '<!doctype html>\n<html lang="en"><head><meta charset="utf-8">'
            f"<title>{escape(part.name)}</title></head>\n<body>{found._repr_html_()}</body></html>\n"
        )
        write_text(html, page)
    choices = [
        {
            "orientation": list(c.orientation),
            "size_mm": list(c.size_mm),
            "layers": c.layers,
            "support_mm3": c.support_mm3,
            "contact_mm2": c.contact_mm2,
            "time_s": list(c.time_s),
            "along_layers": c.along,
            "upright": c.upright,
            "stairs": c.stairs,
        }
        for c in found.choices
    ]
    refused = [{"orientation": list(t), "reason": why} for t, why in found.refused]
    data = {"part": part.name, "order": order, "choices": choices, "refused": refused}
    return 0, data, str(found)


def _lines(result: TrayResult) -> list[str]:
    made, expected = result.tray, result.estimate
    lines = [
        f"tray {made.name} on {made.profile.name}"
        + (" (invented: no real printer)" if made.profile.invented else "")
    ]
    width = max(len(p.name) for p in made.placed)
    for item in made.placed:
        x, y, w, h = made.box_mm(item)
        high = float(item.raster.shape[2] * item.raster.pitch[2])
        lines.append(
            f"  {item.name:<{width}}  at {number(x, 4)}, {number(y, 4)} mm, "
            f"{number(w, 4)} x {number(h, 4)} x {number(high, 4)} mm"
        )
    low, high_s = (number(t / 3600) for t in expected.time_s)
    lines.append(f"  {expected.layers} layers, {low} to {high_s} h")
    for resin, volume in expected.volume_mm3.items():
        lines.append(f"  {resin}: {quantity(volume, 'mm^3')}")
    lines += [f"  note: {note}" for note in result.notes]
    lines += checked_lines(result.findings)
    if result.marks_found:
        lines.append("  all marks in their places")
    lines += [f"stack: {result.stack.folder}", f"picture: {result.picture}"]
    return lines

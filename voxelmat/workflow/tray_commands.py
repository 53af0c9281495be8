"""The shell command that prints many parts together: ``voxelmat tray TRAY.toml``."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

from voxelmat.monitor import Monitor
from voxelmat.units import number, quantity

if TYPE_CHECKING:
    from voxelmat.workflow.traying import TrayResult

__all__ = ["tray"]


def tray(*, tray: Path, out: Path, monitor: Monitor) -> tuple[int, dict[str, Any], str]:
    """Lay out, write, read back and check a tray.

    Parameters
    ----------
    tray : Path
        The tray file.
    out : Path
        Folder for the stack, the picture and ``tray.json``.

    Returns
    -------
    tuple
        Exit code, plain data, text.
    """
    from voxelmat.workflow.traying import run_tray  # loads the slicer

    result = run_tray(tray, out, monitor=monitor)
    return result.exit_code, result.as_dict(), "\n".join(_lines(result))


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
    for f in result.findings:
        lines.append(f"  {f.severity}: {f.message}")
        if f.remedy:
            lines.append(f"        {f.remedy}")
    if not result.findings:
        lines.append("  nothing found" + (", all marks in their places" if made.marks else ""))
    lines += [f"stack: {result.stack.folder}", f"picture: {result.picture}"]
    return lines

"""The shell command `voxelmat tradeoff`: a front of designs as a table, a plot and files."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

from voxelmat.errors import InputError
from voxelmat.io.atomic import write_bytes, write_text
from voxelmat.io.design import load_design
from voxelmat.monitor import Monitor
from voxelmat.workflow.report_tradeoff import front_csv, front_lines, front_picture
from voxelmat.workflow.tradeoff import Sweep, limit_key
from voxelmat.workflow.tradeoff import tradeoff as sweep_limits

__all__ = ["tradeoff"]

Answer = tuple[int, dict[str, Any], str]


def tradeoff(*, design: Path, out: Path, limit: Sequence[str], monitor: Monitor) -> Answer:
    """Optimise under every value, or pair of values, of the limits."""
    plan = load_design(design)
    names, sweeps = [], []
    for text in limit:
        name, values = _values(text)
        names.append(name)
        sweeps.append(Sweep(key=limit_key(plan, name), values=values))
    front = sweep_limits(plan, sweeps, out, monitor=monitor)
    told = tuple(names)
    write_text(out / "front.csv", front_csv(front))
    lines = [f"{plan.name}: {len(front.points)} points in {out}", *front_lines(front, told)]
    if (picture := front_picture(front, told)) is not None:
        write_bytes(out / "front.png", picture.png)
        lines.append(f"plot: {out / 'front.png'}")
    met = any(p.feasible for p in front.points)
    return 0 if met else 1, {"points": front.rows, "folder": str(out)}, "\n".join(lines)


def _values(text: str) -> tuple[str, tuple[float, ...]]:
    name, _, rest = text.partition("=")
    try:
        values = tuple(float(v) for v in rest.split(","))
    except ValueError:
        values = ()
    if not name.strip() or not values:
        raise InputError(
            f"--limit takes a name and values, such as mass=10,12,15; got {text!r}.", key="limit"
        )
    return name.strip(), values

"""The report of a run: one self-contained HTML page that a customer and an engineer can read."""

from __future__ import annotations

import math
from collections import Counter
from pathlib import Path
from typing import Any

from jinja2 import Environment, PackageLoader, StrictUndefined

from voxelmat.io.atomic import write_text
from voxelmat.model.loadcase import PressureMap
from voxelmat.model.result import ROTATION_LIMIT, STRAIN_LIMIT
from voxelmat.monitor import SILENT, Monitor
from voxelmat.units import number
from voxelmat.workflow import report_fields, report_pictures
from voxelmat.workflow import report_tables as tables
from voxelmat.workflow.bill_table import bill_table
from voxelmat.workflow.interfaces import spot_rows
from voxelmat.workflow.report_checks import checks
from voxelmat.workflow.report_data import RunData, StackSummary
from voxelmat.workflow.report_optimised import optimised_section
from voxelmat.workflow.report_pressure import pressure_picture
from voxelmat.workflow.report_tables import Table

__all__ = ["STANDING_CAUTIONS", "RunData", "StackSummary", "write_report"]

#: Said in every report, whatever was computed.
STANDING_CAUTIONS = (
    "This page supports a decision; it does not replace one. Where failure can hurt someone or "
    "carries load, local codes and licensed practice decide, and a test of the printed part comes "
    "before use.",
    "Jetted resins creep, age and soften with heat, light and moisture. The figures hold for the "
    "durations and temperatures stated, on new parts.",
    "Skin contact: use only resins that their maker has cleared for it, fully cured and cleaned. "
    "Uncured resin irritates and sensitises; wear gloves, and follow the maker's safety sheet.",
)


def write_report(run: RunData, path: Path | str, *, monitor: Monitor = SILENT) -> Path:
    """Write the report.

    Parameters
    ----------
    run : RunData
        Whatever it lacks is left out of the page and named at its end.
    path : Path or str
        The HTML file; it is written aside and renamed.
    monitor : Monitor, optional

    Returns
    -------
    Path
        Where it was written.

    Raises
    ------
    ResourceError
        Where the file cannot be written.
    """
    target = Path(path)
    write_text(target, render(run, monitor=monitor))
    return target


def render(run: RunData, *, monitor: Monitor = SILENT) -> str:
    """The page as text."""
    environment = Environment(
        loader=PackageLoader("voxelmat.workflow", "templates"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
    )
    return environment.get_template("report.html.j2").render(_context(run, monitor))


def _context(run: RunData, monitor: Monitor) -> dict[str, Any]:
    """Everything the template shows."""
    total = 4 + len(run.results)

    def step(done: int) -> None:
        monitor.report("drawing the report", done=done, total=total)

    step(0)
    pictures = {
        "space": report_pictures.space_picture(run.part),
        "cut": report_pictures.cut_picture(run.part),
        "blend": report_pictures.blend_picture(run.part),
    }
    step(1)
    cases = []
    for done, name in enumerate(run.results):
        cases.append(_case(run, name))
        step(2 + done)
    optimised = run.optimised
    pictures["solver"] = report_fields.solver_picture(run.results)
    pictures["history"] = (
        report_fields.design_history_picture(optimised) if optimised is not None else None
    )
    stack = _stack(run) if run.stack is not None else None
    step(total)
    return {
        "name": run.name,
        "invented": run.invented,
        "question": run.question.strip(),
        "answer": answer(run),
        "answer_more": more(run),
        "verdicts": tables.verdict_rows(run.verdicts),
        "cautions": [*run.cautions, *STANDING_CAUTIONS],
        "notes": run.notes,
        "grid_words": _grid_words(run),
        "pictures": pictures,
        "resins": tables.resin_table(run.part),
        "cases": cases,
        "strain_limit": f"{number(100 * STRAIN_LIMIT)} %",
        "rotation_limit": f"{number(math.degrees(ROTATION_LIMIT))}°",
        "optimised": optimised_section(optimised) if optimised is not None else None,
        "stack": stack,
        "compared": tables.compared_table(run),
        "checked": run.checked,
        "checks": checks(run),
        "inputs": Table(
            head=("input file", "SHA-256"),
            rows=tuple(run.provenance.inputs.items()),
        ),
        "versions": Table(head=("program", "version"), rows=tuple(run.provenance.versions.items())),
        "timings": Table(
            head=("stage", "time, s"),
            rows=tuple((n, number(t)) for n, t in run.timings.items()),
            numbers=(1,),
        ),
        "digest": run.part.digest,
        "provenance": run.provenance,
        "contents": _contents(run),
        "missing": ", ".join(_missing(run)),
    }


def answer(run: RunData) -> str:
    """The verdicts in one sentence."""
    if not run.verdicts:
        return "No requirement was stated, so there is nothing to answer with yes or no."
    count = Counter(v.status for v in run.verdicts)
    texts = [f"{count[s]} {s}" for s in ("met", "not met", "cannot be said") if count[s]]
    total = len(run.verdicts)
    return f"Of {total} requirement{'s' if total != 1 else ''}: {', '.join(texts)}."


def more(run: RunData) -> str:
    """What the numbers say where the verdict cannot."""
    unsaid = [v for v in run.verdicts if v.status == "cannot be said"]
    if not unsaid:
        return ""
    inside = sum(v.margin >= 0 for v in unsaid)
    return (
        f"Of what cannot be said, {inside} of {len(unsaid)} values lie within their limits, but "
        "the data behind them are too uncertain for a yes or a no."
    )


def _grid_words(run: RunData) -> str:
    part = run.part
    n, h = part.grid.shape, part.grid.spacing
    solid = int(part.solid.sum())
    return (
        f"{n[0]} × {n[1]} × {n[2]} voxels of {number(h[0])} × {number(h[1])} × {number(h[2])} mm, "
        f"of which {solid:,} hold material. Outline for printing: {part.outline}. "
        f"Blends are turned into stiffness by the law '{part.law.key}'."
    )


def _case(run: RunData, name: str) -> dict[str, Any]:
    result = run.results[name]
    safety = run.safety.get(name)
    maps = [load for load in result.load_case.loads if isinstance(load, PressureMap)]
    return {
        "name": name,
        "loads": tables.load_table(result.load_case),
        "maps": [pressure_picture(result.part, load) for load in maps],
        "found": tables.found_table(run, name),
        "interfaces": _interfaces(run, name),
        "displacement": report_fields.displacement_picture(result),
        "stress": report_fields.stress_picture(result),
        "safety": report_fields.safety_picture(result, safety) if safety is not None else None,
        "cautions": result.cautions,
    }


def _interfaces(run: RunData, name: str) -> Table | None:
    """The worst places where two resins meet; None where none do."""
    spots = run.interfaces.get(name, ())
    if not spots:
        return None
    return Table(
        head=(
            "interface",
            "worst places, mm",
            "normal, MPa",
            "shear, MPa",
            "uncertain by, MPa",
            "strength used",
            "remarks",
        ),
        rows=spot_rows(spots),
        numbers=(2, 3, 4, 5),
        caption="normal traction above 0 pulls the two apart; pressing does not use strength",
    )


def _stack(run: RunData) -> dict[str, Any]:
    stack = run.stack
    if stack is None:
        raise TypeError("There is no stack to describe.")
    dx, dy, dz = (1e3 * p for p in stack.pitch_mm)
    columns, rows, layers = stack.sites
    size = " × ".join(number(s) for s in stack.size_mm)
    words = (
        f"Folder {stack.folder}: {layers:,} layers of {columns:,} × {rows:,} sites, "
        f"{number(dx, 4)} × {number(dy, 4)} × {number(dz, 4)} µm each; {size} mm on the tray."
    )
    how = [t.rstrip(".") for t in (stack.orientation, stack.support, stack.halftone) if t]
    if how:
        words += f" How it was laid: {'; '.join(how)}."
    estimate = Table(head=("estimate", "value"), rows=tuple(stack.estimate.items()), numbers=(1,))
    return {
        "words": words,
        "table": tables.stack_table(stack),
        "estimate": estimate if stack.estimate else None,
        "bill": bill_table(stack.bill) if stack.bill else None,
        "layers": report_pictures.layer_pictures(stack, run.part),
    }


def _contents(run: RunData) -> list[tuple[str, str]]:
    found = [("question", "The question and the answer"), ("part", "The part")]
    if run.results:
        found.append(("loads", "What the loads do"))
    if run.optimised is not None:
        found.append(("optimised", "How the material was laid out"))
    if run.stack is not None:
        found.append(("stack", "The stack for the printer"))
    if run.checked:
        found.append(("preflight", "Preflight findings"))
    return [*found, ("record", "Record")]


def _missing(run: RunData) -> list[str]:
    wanted = {
        "a solve": bool(run.results),
        "an optimisation": run.optimised is not None,
        "a stack": run.stack is not None,
        "a solve of the stack as printed": bool(run.as_printed),
        "a preflight": run.checked,
        "requirements": bool(run.verdicts),
    }
    return [name for name, present in wanted.items() if not present]

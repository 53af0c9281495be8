"""What each shell command does: an exit code, plain data for JSON, and text."""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import Any

from voxelmat.errors import InputError
from voxelmat.io.design import load_design
from voxelmat.io.materials import load_library
from voxelmat.material.hardness import VALID_SHORE_A, modulus_from_shore_a
from voxelmat.material.table import material_rows
from voxelmat.model.result import StaticResult
from voxelmat.monitor import Monitor
from voxelmat.topopt.iterate import Iterate
from voxelmat.units import number

__all__ = ["materials", "optimise", "report", "run", "solve", "stack", "warm"]

Answer = tuple[int, dict[str, Any], str]

# The stages load the compiled solver and slicer; a command that needs neither starts without.


def _stages(
    design: Path,
    out: Path,
    stages: Sequence[str] | None,
    monitor: Monitor,
    *,
    vti: bool = False,
    workers: int = 1,
    scheduler: str | None = None,
    watch: Callable[[Iterate], None] | None = None,
) -> Answer:
    from voxelmat.workflow.answer import summary_lines
    from voxelmat.workflow.pipeline import STAGES
    from voxelmat.workflow.pipeline import run as run_stages

    result = run_stages(
        design,
        out,
        stages=STAGES if stages is None else stages,
        monitor=monitor,
        workers=workers,
        scheduler=scheduler,
        watch=watch,
    )
    lines = summary_lines(
        result.data, stack=result.stack, report=result.report, folder=result.folder
    )
    data = result.as_dict()
    if vti:
        data["vti"] = [str(path) for path in _write_vti(result.data.results, out)]
        lines += [f"  fields: {path}" for path in data["vti"]]
    return result.exit_code, data, "\n".join(lines)


def _write_vti(results: Mapping[str, StaticResult], out: Path) -> list[Path]:
    """One VTK image file a load case, named after it."""
    from voxelmat.io.vti import write_vti

    made = []
    for number_of, (name, result) in enumerate(results.items(), start=1):
        slug = re.sub(r"[^A-Za-z0-9]+", "-", name).strip("-") or "case"
        made.append(write_vti(result, out / f"{number_of}-{slug}.vti"))
    return made


def run(
    *, design: Path, out: Path, workers: int, scheduler: str | None, monitor: Monitor
) -> Answer:
    """Everything."""
    return _stages(design, out, None, monitor, workers=workers, scheduler=scheduler)


def solve(*, design: Path, out: Path, vti: bool, monitor: Monitor) -> Answer:
    """The load cases on the part as it is laid out (and optimised, if the design asks)."""
    return _stages(design, out, ("optimise", "solve", "grid error"), monitor, vti=vti)


def optimise(*, design: Path, out: Path, animate: Path | None, monitor: Monitor) -> Answer:
    """The optimisation, and the load cases on what it made."""
    if load_design(design).optimise is None:
        raise InputError(
            "The design has no [optimise] table, so there is nothing to optimise.",
            file=str(design),
            key="optimise",
        )
    if animate is None:
        return _stages(design, out, ("optimise", "solve"), monitor)
    from voxelmat.workflow.animate import Frames, check_animation, write_animation

    frames = Frames()
    check_animation(animate)
    code, data, text = _stages(design, out, ("optimise", "solve"), monitor, watch=frames)
    unit = str(data["optimised"]["values"][0]["unit"])
    write_animation(frames.iterates, animate, unit=unit, monitor=monitor)
    return code, {**data, "animation": str(animate)}, f"{text}\n  animation: {animate}"


def stack(
    *, design: Path, out: Path, workers: int, scheduler: str | None, monitor: Monitor
) -> Answer:
    """The stacks, written, read back and checked."""
    if load_design(design).printing is None:
        raise InputError(
            "The design has no [print] table, so there is nothing to print on. Name a profile.",
            file=str(design),
            key="print",
        )
    stages = ("optimise", "stack")
    return _stages(design, out, stages, monitor, workers=workers, scheduler=scheduler)


def report(*, design: Path, out: Path, monitor: Monitor) -> Answer:
    """The report of what a run left; its optimisation and stack are taken as they are."""
    if not (out / "result.json").is_file():
        raise InputError(
            f"There is no finished run in '{out}'. Call 'voxelmat run {design} --out {out}' first."
        )
    return _stages(design, out, None, monitor)


def warm(*, monitor: Monitor) -> Answer:
    """Compile everything ahead and say what took how long."""
    from voxelmat.workflow.warm import warm as compile_all
    from voxelmat.workflow.warm import warm_lines

    done = compile_all(monitor)
    groups = [{"group": g.group, "seconds": g.seconds, "kernels_s": g.kernels} for g in done]
    return 0, {"groups": groups}, "\n".join(warm_lines(done))


_COLUMNS = (
    ("name", "name"),
    ("kind", "kind"),
    ("shore_A", "Shore A"),
    ("E_MPa", "E, MPa"),
    ("E_low_MPa", "low"),
    ("E_high_MPa", "high"),
    ("nu", "nu"),
    ("density_g_cm3", "g/cm3"),
    ("strength_MPa", "strength, MPa"),
    ("elongation_percent", "elongation, %"),
    ("source", "source of E"),
)


def _hardness(values: Sequence[float]) -> Answer:
    """What Shore A hardnesses stand for, by both relations."""
    rows, lines = [], []
    for value in values:
        band = modulus_from_shore_a(value)
        rows.append(
            {
                "shore_A": value,
                "E_low_MPa": band.low,
                "E_high_MPa": band.high,
                "E_Gent_1958_MPa": band.gent,
                "E_log_relation_MPa": band.log,
                "in_range": band.in_range,
            }
        )
        low, high = VALID_SHORE_A
        beyond = "" if band.in_range else f"; extrapolated beyond Shore A {low:g} to {high:g}"
        lines.append(
            f"Shore A {number(value)}: E between {number(band.low)} and {number(band.high)} MPa "
            f"(Gent 1958: {number(band.gent)}, logarithmic relation: {number(band.log)}{beyond})"
        )
    return 0, {"hardness": rows}, "\n".join(lines)


def materials(*, file: Sequence[Path], shore_a: Sequence[float], monitor: Monitor) -> Answer:
    """The resin library as a table, or the modulus behind a hardness."""
    del monitor  # nothing takes long here
    if shore_a:
        return _hardness(shore_a)
    library = load_library(file)
    rows = material_rows(library)
    texts = [[head for _, head in _COLUMNS]]
    for row in rows:
        cells = []
        for key, _ in _COLUMNS:
            value = row[key]
            cells.append(
                "-" if value is None else value if isinstance(value, str) else number(value, 4)
            )
        texts.append(cells)
    width = [max(len(line[c]) for line in texts) for c in range(len(_COLUMNS))]
    right = {c for c, (key, _) in enumerate(_COLUMNS) if key not in ("name", "kind", "source")}
    lines = [
        "  ".join(
            cell.rjust(width[c]) if c in right else cell.ljust(width[c])
            for c, cell in enumerate(line)
        ).rstrip()
        for line in texts
    ]
    lines += [f"note: {note}" for note in library.notes]
    return 0, {"materials": rows, "notes": list(library.notes)}, "\n".join(lines)

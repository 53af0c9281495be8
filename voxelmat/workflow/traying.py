"""From a tray file to a checked stack: load or make each part, lay out, write, read back."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from voxelmat.errors import InputError
from voxelmat.io.atomic import explain_os_error, write_bytes, write_json
from voxelmat.io.bigpart import AnyPart, open_big_part
from voxelmat.io.design import load_design
from voxelmat.io.materials import load_library
from voxelmat.io.store import load_part
from voxelmat.io.trayfile import TrayPart, TrayPlan, load_tray_file
from voxelmat.model.design import Design
from voxelmat.model.finding import SEVERITIES, Finding
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.estimate import PrintEstimate, estimate
from voxelmat.printing.findmark import mark_findings
from voxelmat.printing.preflight import preflight
from voxelmat.printing.profile import load_profile
from voxelmat.printing.readback import Stack, read_stack
from voxelmat.printing.tray import Tray, TrayEntry, lay_out, write_tray
from voxelmat.workflow.build import Built, build
from voxelmat.workflow.report_tray import tray_picture

__all__ = ["TrayResult", "run_tray", "tray_of"]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TrayResult:
    """What came of a tray file.

    Attributes
    ----------
    plan : TrayPlan
    tray : Tray
    stack : Stack
    findings : tuple of Finding
        Worst first.
    estimate : PrintEstimate
    picture : Path
        The tray from above.
    folder : Path
    notes : tuple of str
        Where each part came from, and what was done otherwise than asked.
    """

    plan: TrayPlan
    tray: Tray
    stack: Stack
    findings: tuple[Finding, ...]
    estimate: PrintEstimate
    picture: Path
    folder: Path
    notes: tuple[str, ...]

    @property
    def exit_code(self) -> int:
        """1 where a finding says: do not print."""
        return 1 if any(f.severity == "stop" for f in self.findings) else 0

    def as_dict(self) -> dict[str, Any]:
        """Plain data for JSON, lengths in mm."""
        return {
            "tray": self.tray.name,
            "job_number": self.tray.job_number,
            "profile": self.tray.profile.name,
            "spacing_mm": self.tray.spacing_mm,
            "parts": [
                {
                    "name": p.name,
                    "kind": p.kind,
                    "position_mm": list(self.tray.box_mm(p)[:2]),
                    "size_mm": [
                        *self.tray.box_mm(p)[2:],
                        float(p.raster.shape[2] * p.raster.pitch[2]),
                    ],
                }
                for p in self.tray.placed
            ],
            "stack": str(self.stack.folder),
            "picture": str(self.picture),
            "layers": self.estimate.layers,
            "volume_mm3": dict(self.estimate.volume_mm3),
            "support_mm3": self.estimate.support_mm3,
            "time_s": list(self.estimate.time_s),
            "findings": [
                {
                    "severity": f.severity,
                    "code": f.code,
                    "message": f.message,
                    "part": f.part,
                    "place_mm": None if f.place_mm is None else list(f.place_mm),
                    "remedy": f.remedy,
                }
                for f in self.findings
            ],
            "notes": list(self.notes),
        }


def run_tray(path: str | Path, folder: str | Path, *, monitor: Monitor = SILENT) -> TrayResult:
    """Lay out, write, read back and check what a tray file says.

    Parameters
    ----------
    path : str or Path
        The tray file.
    folder : str or Path
        Gets ``stack/``, ``tray.png`` and ``tray.json``. A run that was interrupted goes on from
        its last whole layer.
    monitor : Monitor

    Raises
    ------
    InputError, FileFormatError
        With file and key where an input is at fault.
    ResourceError
        If the folder cannot be used.
    """
    plan = load_tray_file(path)
    folder = Path(folder)
    tray, notes = tray_of(plan, monitor=monitor)
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise explain_os_error(folder, error) from error
    picture = folder / "tray.png"
    write_bytes(picture, tray_picture(tray).png)
    write_tray(
        tray,
        folder / "stack",
        support=plan.support,
        seed=plan.seed,
        inputs=plan.inputs,
        monitor=monitor,
    )
    stack = read_stack(folder / "stack")
    found = preflight(stack, monitor=monitor)
    if not any(f.code in ("unreadable layer", "changed layer") for f in found):
        found = [*found, *mark_findings(stack, monitor=monitor)]
    found.sort(key=lambda f: SEVERITIES.index(f.severity))
    result = TrayResult(
        plan=plan,
        tray=tray,
        stack=stack,
        findings=tuple(found),
        estimate=estimate(stack),
        picture=picture,
        folder=folder,
        notes=tuple(notes),
    )
    write_json(folder / "tray.json", result.as_dict())
    return result


def tray_of(plan: TrayPlan, *, monitor: Monitor = SILENT) -> tuple[Tray, list[str]]:
    """Load or make the parts of a plan and lay them out; also notes for the user."""
    profile = load_profile(plan.profile)
    known: dict[tuple[Path | None, Path | None], _Source] = {}
    entries, notes = [], []
    for n, item in enumerate(plan.parts):
        try:
            entry, said = _entry(item, known, monitor)
        except InputError as error:
            if error.file is not None:
                raise
            raise InputError(error.message, file=str(plan.path), key=f"part[{n}]") from None
        entries.append(entry)
        notes += [s for s in said if s not in notes]
    try:
        tray = lay_out(
            entries,
            profile,
            spacing_mm=plan.spacing_mm,
            marks=plan.marks,
            coupons=plan.coupons,
            name=plan.name,
            job_number=plan.job_number,
            support=plan.support,
            monitor=monitor,
        )
    except InputError as error:
        raise InputError(error.message, file=error.file or str(plan.path), key=error.key) from None
    return tray, [*notes, *tray.notes]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Source:
    """Where a part came from; `built` only where the design was made anew."""

    part: AnyPart
    design: Design | None = None
    built: Built | None = None
    notes: tuple[str, ...] = ()


def _entry(
    item: TrayPart, known: dict[tuple[Path | None, Path | None], _Source], monitor: Monitor
) -> tuple[TrayEntry, tuple[str, ...]]:
    key = (item.design or item.store, item.run)
    if key not in known:
        known[key] = _source(item, monitor)
    source = known[key]
    orientation = item.orientation
    if orientation is None:
        printing = source.design.printing if source.design is not None else None
        orientation = printing.orientation if printing is not None else ()
    protected = None
    if item.mark == "engraved" and source.design is not None:
        names = item.protected
        if names is None:
            names = source.design.optimise.protected if source.design.optimise else ()
        if names:
            built = source.built or build(source.design, monitor=monitor)
            known[key] = _Source(
                part=source.part, design=source.design, built=built, notes=source.notes
            )
            protected = _protected(built, names)
    entry = TrayEntry(
        part=source.part,
        name=item.name,
        copies=item.copies,
        orientation=orientation,
        position_mm=item.position_mm,
        may_turn=item.may_turn,
        side=item.side,
        mark=item.mark,
        face=item.face,
        mark_depth_mm=item.mark_depth_mm,
        protected=protected,
    )
    return entry, source.notes


def _protected(built: Built, names: tuple[str, ...]) -> Any:
    missing = [n for n in names if n not in built.regions]
    if missing:
        raise InputError(
            f"The design has no region '{missing[0]}'; it has {', '.join(built.regions)}.",
            file=built.design.file_name,
            key="protected",
        )
    masks = [built.regions[n].voxels(built.part) for n in names]
    total = masks[0].copy()
    for mask in masks[1:]:
        total |= mask
    return total


def _source(item: TrayPart, monitor: Monitor) -> _Source:
    if item.store is not None:
        return _Source(part=open_big_part(item.store))
    if item.design is None:
        raise InputError("A part needs a design or a store.", key="design")
    design = load_design(item.design)
    if item.run is not None:
        kept = item.run / "part.npz"
        if not kept.is_file():
            raise InputError(
                f"'{kept}' is missing: give the folder that the design's run wrote to.", key="run"
            )
        law = load_library([design.file(f) for f in design.material_files]).law(design.law)
        return _Source(
            part=load_part(kept, law), design=design, notes=_run_notes(item.run, item.design)
        )
    if design.optimise is not None:
        raise InputError(
            f"'{design.name}' is optimised: run it first ('voxelmat run') and name its folder "
            "with run = .., or nothing but its start would be printed.",
            file=str(item.design),
            key="optimise",
        )
    built = build(design, monitor=monitor)
    note = f"'{design.name}' was made anew from {item.design.name}."
    return _Source(part=built.part, design=design, built=built, notes=(note,))


def _run_notes(run: Path, design: Path) -> tuple[str, ...]:
    """Where the part came from, and whether its design is newer than that."""
    notes = [f"'{design.name}': the part in '{run.name}' is printed."]
    if (run / "part.npz").stat().st_mtime < design.stat().st_mtime:
        notes.append(
            f"Caution: '{design.name}' was changed after its run in '{run.name}'; run it again "
            "if the change matters."
        )
    verdicts: list[Mapping[str, Any]] = []
    try:
        data = json.loads((run / "result.json").read_text("utf-8"))
        verdicts = [v for v in data.get("verdicts", []) if isinstance(v, dict)]
    except (OSError, ValueError, AttributeError):
        notes.append(f"There is no finished result in '{run.name}', so no verdict is known.")
    failed = [str(v.get("requirement", "?")) for v in verdicts if v.get("status") == "not met"]
    if failed:
        notes.append(f"Caution: not met in that run: {', '.join(failed)}.")
    return tuple(notes)

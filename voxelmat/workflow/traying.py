"""From a tray file to a checked stack: load or make each part, lay out, write, read back."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from voxelmat.errors import InputError
from voxelmat.io.atomic import explain_os_error, write_bytes, write_json
from voxelmat.io.trayfile import TrayPlan, load_tray_file
from voxelmat.model.deviation import OutlineDeviation
from voxelmat.model.finding import Finding
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.estimate import PrintEstimate, estimate
from voxelmat.printing.findmark import MARK_CODES
from voxelmat.printing.preflight import check_stack
from voxelmat.printing.profile import load_profile
from voxelmat.printing.readback import Stack, read_stack
from voxelmat.printing.tray import Tray, lay_out, write_tray
from voxelmat.workflow.finding_words import finding_dict, outline_dict
from voxelmat.workflow.report_tray import tray_picture
from voxelmat.workflow.trayparts import PartSources

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
    outlines : mapping of str to OutlineDeviation
        How far the outline of each part lies off its design's.
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
    outlines: Mapping[str, OutlineDeviation]
    estimate: PrintEstimate
    picture: Path
    folder: Path
    notes: tuple[str, ...]

    @property
    def exit_code(self) -> int:
        """1 where a finding says: do not print."""
        return 1 if any(f.severity == "stop" for f in self.findings) else 0

    @property
    def marks_found(self) -> bool:
        """True where there are marks, and all were found in their places."""
        return bool(self.tray.marks) and not any(f.code in MARK_CODES for f in self.findings)

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
            "findings": [finding_dict(f) for f in self.findings],
            "outlines": {n: outline_dict(seen) for n, seen in self.outlines.items()},
            "notes": list(self.notes),
        }


def run_tray(
    path: str | Path,
    folder: str | Path,
    *,
    workers: int = 1,
    scheduler: str | None = None,
    monitor: Monitor = SILENT,
) -> TrayResult:
    """Lay out, write, read back and check what a tray file says.

    Parameters
    ----------
    path : str or Path
        The tray file.
    folder : str or Path
        Gets ``stack/``, ``tray.png`` and ``tray.json``. A run that was interrupted goes on from
        its last whole layer.
    workers, scheduler
        As for `voxelmat.printing.stack.write_job`.
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
        workers=workers,
        scheduler=scheduler,
    )
    stack = read_stack(folder / "stack")
    checks = check_stack(stack, tray.designs, monitor=monitor)
    result = TrayResult(
        plan=plan,
        tray=tray,
        stack=stack,
        findings=checks.findings,
        outlines=checks.outlines,
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
    sources = PartSources(monitor)
    entries = []
    for n, item in enumerate(plan.parts):
        try:
            entries.append(sources.entry(item))
        except InputError as error:
            if error.file is not None:
                raise
            key = f"part[{n}]" + (f".{error.key}" if error.key else "")
            raise InputError(error.message, file=str(plan.path), key=key) from None
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
    return tray, [*sources.notes, *tray.notes]

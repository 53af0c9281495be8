"""The printing stage of a run: stack, checks, measures, and the papers for the print room."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import datetime
from pathlib import Path
from typing import Any

from voxelmat.io.atomic import explain_os_error, write_text
from voxelmat.model.part import Part
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.bill import write_bom_csv
from voxelmat.printing.estimate import estimate
from voxelmat.printing.occupancy import gather
from voxelmat.printing.readback import Stack, read_stack
from voxelmat.printing.stack import write_stack
from voxelmat.workflow.build import Built
from voxelmat.workflow.checking import Checked, check_built
from voxelmat.workflow.finding_pictures import finding_pictures
from voxelmat.workflow.report_canvas import Picture
from voxelmat.workflow.report_data import StackSummary
from voxelmat.workflow.summary import summarise
from voxelmat.workflow.ticket import write_ticket

__all__ = ["PrintStage", "check_stage", "stack_stage"]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PrintStage:
    """What the printing stage made.

    Attributes
    ----------
    summary : StackSummary
    checked : Checked
    pictures : mapping of int to Picture
        Of the findings that have a place, by their number.
    papers : mapping of str to Path
        "bill of materials", "ticket" and, where something was measured, "inspection".
    """

    summary: StackSummary
    checked: Checked
    pictures: Mapping[int, Picture] = field(default_factory=dict)
    papers: Mapping[str, Path] = field(default_factory=dict)

    def shown(self) -> dict[str, Any]:
        """What of it the report shows, as arguments of `RunData`."""
        return {
            "stack": self.summary,
            "findings": self.checked.findings,
            "finding_pictures": self.pictures,
            "checked": True,
            "outline": self.checked.outline,
            "inspection": self.checked.inspection,
        }


def stack_stage(
    built: Built,
    part: Part,
    folder: Path,
    *,
    workers: int = 1,
    scheduler: str | None = None,
    monitor: Monitor = SILENT,
) -> Stack | None:
    """Write the stack of a part into ``folder/stack`` and read it back; None without a printer."""
    printing = built.design.printing
    if printing is None or built.profile is None:
        return None
    write_stack(
        part,
        built.profile,
        folder / "stack",
        orientation=printing.orientation,
        position=printing.position_mm,
        support=printing.support,
        seed=built.design.seed,
        halftone=printing.halftone,
        notes={"job_number": printing.job_number} if printing.job_number else None,
        monitor=monitor,
        inputs=built.design.inputs,
        workers=workers,
        scheduler=scheduler,
    )
    return read_stack(folder / "stack")


def check_stage(
    stack: Stack, built: Built, part: Part, folder: Path, *, monitor: Monitor = SILENT
) -> PrintStage:
    """Check and measure a stack; write its bill, its ticket and the inspection beside it.

    Raises
    ------
    ResourceError
        If a paper cannot be written.
    """
    checked = check_built(stack, built, part, monitor=monitor)
    occupancy = gather(stack, monitor=monitor)
    figures = estimate(stack, occupancy=occupancy)
    papers = {
        "bill of materials": write_bom_csv(figures.bill, folder / "bom.csv"),
        "ticket": folder / "ticket.html",
    }
    write_ticket(
        stack,
        papers["ticket"],
        day=datetime.now().astimezone().date(),
        findings=checked.findings,
        occupancy=occupancy,
        monitor=monitor,
    )
    sheet = folder / "inspection.csv"
    if checked.inspection is not None:
        write_text(sheet, checked.inspection.csv())
        papers["inspection"] = sheet
    else:
        _remove(sheet)  # of an earlier state of the design
    return PrintStage(
        summary=summarise(stack, figures),
        checked=checked,
        pictures=finding_pictures(checked.findings, stack, part),
        papers=papers,
    )


def _remove(path: Path) -> None:
    try:
        path.unlink(missing_ok=True)
    except OSError as error:
        raise explain_os_error(path, error) from error

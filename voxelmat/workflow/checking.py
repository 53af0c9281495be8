"""Everything that is checked and measured on a finished stack of a built design."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import FileFormatError
from voxelmat.model.deviation import OutlineDeviation
from voxelmat.model.finding import SEVERITIES, Finding
from voxelmat.model.inspection import InspectionSheet
from voxelmat.model.part import Part
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.inspection import inspection_findings, measure
from voxelmat.printing.partcheck import as_sliced
from voxelmat.printing.preflight import check_stack
from voxelmat.printing.readback import Stack
from voxelmat.printing.support import outline_field
from voxelmat.shape.bodies import Body
from voxelmat.workflow.build import Built

__all__ = ["Checked", "check_built", "meshes_of"]

Bools = NDArray[np.bool_]


@dataclass(frozen=True, slots=True, kw_only=True)
class Checked:
    """What came of the checks.

    Attributes
    ----------
    findings : tuple of Finding
        Worst first.
    inspection : InspectionSheet or None
        Dimensions and protected surfaces of the design; None where it names none.
    outline : OutlineDeviation or None
        None where the outline could not be compared.
    """

    findings: tuple[Finding, ...]
    inspection: InspectionSheet | None = None
    outline: OutlineDeviation | None = None


def meshes_of(built: Built, part: Part) -> tuple[Body, ...]:
    """The meshes that the printed outline of a part can be compared with.

    Parameters
    ----------
    built : Built
    part : Part
        On the same grid: `built.part`, or what the optimiser made of it.

    Returns
    -------
    tuple of Body
        Empty where the optimiser's void, a stored part or a closed gap made another outline.
    """
    base = built.part
    if part is not base and not (
        part.grid == base.grid
        and part.distance is not None
        and base.distance is not None
        and np.array_equal(part.distance, base.distance)
        and np.array_equal(outline_field(part) < 0, outline_field(base) < 0)
    ):
        return ()
    return built.bodies


def check_built(
    stack: Stack, built: Built, part: Part, *, deep: bool = True, monitor: Monitor = SILENT
) -> Checked:
    """Check a stack of one part and measure what its design asks for.

    Parameters
    ----------
    stack : Stack
        Read from disk.
    built : Built
    part : Part
        What the stack was written from.
    deep : bool
        See `voxelmat.printing.preflight.check_stack`.
    monitor : Monitor

    Returns
    -------
    Checked
        A stack with a file that is missing or changed is not measured; the findings name it.
    """
    checks = check_stack(stack, part, bodies=meshes_of(built, part), deep=deep, monitor=monitor)
    sheet = _measured(stack, built, part, monitor)
    findings = list(checks.findings)
    if sheet is not None:
        findings += inspection_findings(sheet)
    findings.sort(key=lambda f: SEVERITIES.index(f.severity))
    return Checked(
        findings=tuple(findings),
        inspection=sheet,
        outline=next(iter(checks.outlines.values()), None),
    )


def _measured(stack: Stack, built: Built, part: Part, monitor: Monitor) -> InspectionSheet | None:
    design = built.design
    names = design.optimise.protected if design.optimise is not None else ()
    if not design.dimensions and not names:
        return None
    surfaces = {name: built.regions[name].voxels(built.part) for name in names}
    sliced = as_sliced(part, stack)
    if sliced.grid != part.grid:  # a margin was added for the printer's bias
        surfaces = {name: _on_grid(mask, part, sliced) for name, mask in surfaces.items()}
    try:
        return measure(stack, design.dimensions, part=sliced, protected=surfaces, monitor=monitor)
    except FileFormatError:
        return None


def _on_grid(mask: Bools, part: Part, larger: Part) -> Bools:
    """A mask on the grid of `part`, laid into that of a part with a margin round it."""
    start = [
        round((a - b) / h)
        for a, b, h in zip(part.grid.origin, larger.grid.origin, part.grid.spacing, strict=True)
    ]
    out = np.zeros(larger.grid.shape, dtype=np.bool_, order="F")
    out[tuple(slice(s, s + n) for s, n in zip(start, mask.shape, strict=True))] = mask
    return out

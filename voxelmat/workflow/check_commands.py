"""`voxelmat preflight`: the checks on a stack on disk, with its design where one is given."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

from voxelmat.errors import InputError
from voxelmat.monitor import Monitor
from voxelmat.printing.preflight import check_stack
from voxelmat.printing.readback import read_stack
from voxelmat.workflow.build import build
from voxelmat.workflow.checking import Checked, check_built
from voxelmat.workflow.finding_words import checked_dict, checked_lines
from voxelmat.workflow.fix_commands import fix as repair
from voxelmat.workflow.trayparts import part_of_run

__all__ = ["preflight"]

Answer = tuple[int, dict[str, Any], str]


def preflight(
    *,
    stack: Path,
    design: Path | None,
    out: Path,
    shallow: bool,
    fix: bool,
    drain: Sequence[str],
    monitor: Monitor,
) -> Answer:
    """Check a stack, or repair its design as `voxelmat fix` does.

    Parameters
    ----------
    stack : Path
    design : Path or None
        The design that it was written from; what it says is compared and measured then.
    out : Path
        Folder of the design's run, which holds the part.
    shallow : bool
        Leave out what is judged in three dimensions.
    fix, drain
        As for `voxelmat.workflow.fix_commands.fix`.
    monitor : Monitor

    Returns
    -------
    tuple
        Exit code (1 where a finding says stop), plain data, text.
    """
    if fix:
        if design is None or shallow:
            raise InputError(
                "--fix repairs the part of a design on what every check finds: name the design "
                "with --design, and leave --shallow out.",
                key="--fix",
            )
        return repair(stack=stack, design=design, out=out, drain=drain, monitor=monitor)
    if drain:
        raise InputError("--drain cuts a hole, so it goes with --fix.", key="--drain")
    opened = read_stack(stack)
    if design is None:
        checks = check_stack(opened, deep=not shallow, monitor=monitor)
        found = Checked(findings=checks.findings)
    else:
        if len(opened.parts) != 1:
            raise InputError(
                f"The stack holds {len(opened.parts)} parts, and one design was given. Leave it "
                "out, or let 'voxelmat tray' compare each part with its own.",
                key="--design",
            )
        built = build(design, monitor=monitor)
        part = part_of_run(built.design, out)
        found = check_built(opened, built, part, deep=not shallow, monitor=monitor)
    bad = any(f.severity == "stop" for f in found.findings)
    data = {
        "stack": str(stack),
        **checked_dict(found.findings, found.outline, found.inspection),
    }
    lines = [repr(opened), *checked_lines(found.findings, found.outline, found.inspection)]
    return (1 if bad else 0), data, "\n".join(lines)

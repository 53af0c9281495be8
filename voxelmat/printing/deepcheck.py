"""The checks in three dimensions beside the packed ones, nothing said twice."""

from __future__ import annotations

from voxelmat.model.finding import Finding
from voxelmat.model.profile import PrintProfile
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.checks3d import three_d_findings
from voxelmat.printing.readback import Stack
from voxelmat.printing.scan import Facts

__all__ = ["deep_findings", "without_repeats"]

#: Packed screen and the check in three dimensions that judges the same feature by its thickness.
_SAME = {
    "thin wall or strut": ("wall under minimum", "strut under minimum"),
    "thin gap": ("gap under minimum", "hole under minimum"),
}


def deep_findings(
    stack: Stack, facts: Facts, profile: PrintProfile, *, monitor: Monitor = SILENT
) -> list[Finding]:
    """Everything that is judged in three dimensions on sites, sealed cavities not again.

    Parameters
    ----------
    stack : Stack
    facts : Facts
        Of the same stack.
    profile : PrintProfile
    monitor : Monitor
    """
    sealed = [p for p in facts.hollows if not p.on_tray and not p.at_side]
    return three_d_findings(stack, None, profile, sealed=sealed, monitor=monitor)


def without_repeats(found: list[Finding]) -> list[Finding]:
    """Leave out what the packed screen found and the thickness check names too."""
    codes = {f.code for f in found}
    return [f for f in found if not codes.intersection(_SAME.get(f.code, ()))]

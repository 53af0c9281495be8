"""The checks in three dimensions: thickness, ways out of rooms, what hangs free. Slower, apart."""

from __future__ import annotations

from voxelmat.model.finding import Finding
from voxelmat.model.profile import PrintProfile
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.drains import drain_findings
from voxelmat.printing.jumps import jump_findings
from voxelmat.printing.readback import Stack
from voxelmat.printing.scan import Facts
from voxelmat.printing.thickness import thickness_findings

__all__ = ["deep_findings", "without_repeats"]

#: Said with more detail by `voxelmat.printing.oddlayers` and `voxelmat.printing.layerdesign`.
_SAID = ("layer out of line", "other layer")
#: Packed screen and the check in three dimensions that judges the same feature by its thickness.
_SAME = {
    "thin wall or strut": ("wall under minimum", "strut under minimum"),
    "thin gap": ("gap under minimum", "hole under minimum"),
}


def deep_findings(
    stack: Stack, facts: Facts, profile: PrintProfile, *, monitor: Monitor = SILENT
) -> list[Finding]:
    """Everything that is judged in three dimensions.

    Parameters
    ----------
    stack : Stack
    facts : Facts
        Of the same stack; what it says already is not said again.
    profile : PrintProfile
    monitor : Monitor
    """
    sealed = [p for p in facts.hollows if not p.on_tray and not p.at_side]
    return [
        *thickness_findings(stack, profile, monitor=monitor),
        *drain_findings(stack, profile, sealed=sealed, monitor=monitor),
        *(f for f in jump_findings(stack, monitor=monitor) if f.code not in _SAID),
    ]


def without_repeats(found: list[Finding]) -> list[Finding]:
    """Leave out what the packed screen found and the thickness check names too."""
    codes = {f.code for f in found}
    return [f for f in found if not codes.intersection(_SAME.get(f.code, ()))]

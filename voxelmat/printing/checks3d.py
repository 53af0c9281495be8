"""All three-dimensional checks of a written stack and its design, in one call.

They cost more than the packed checks of `voxelmat.printing.scan` and are reported apart.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence

from voxelmat.model.finding import SEVERITIES, Finding
from voxelmat.model.part import Part
from voxelmat.model.profile import PrintProfile
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.drains import drain_findings
from voxelmat.printing.jumps import jump_findings
from voxelmat.printing.pieces import Piece
from voxelmat.printing.raster import Raster
from voxelmat.printing.readback import Stack
from voxelmat.printing.skins import skin_findings
from voxelmat.printing.slender import slender_findings
from voxelmat.printing.support_policies import support_fill
from voxelmat.printing.tearing import tearing_findings
from voxelmat.printing.thickness import thickness_findings
from voxelmat.printing.zones import MOST_VOXELS, Zones

__all__ = ["design_findings", "three_d_findings"]


def three_d_findings(
    stack: Stack,
    part: Part | None = None,
    profile: PrintProfile | None = None,
    *,
    sealed: Sequence[Piece] = (),
    monitor: Monitor = SILENT,
) -> list[Finding]:
    """Thickness, drains, overhangs of a stack; skins, tearing and dragging of its design.

    Parameters
    ----------
    stack : Stack
    part : Part, optional
        What a stack of one part was sliced from.
    profile : PrintProfile, optional
        The one in the manifest if left out.
    sealed : sequence of Piece
        Sealed cavities that are reported already.
    monitor : Monitor

    Returns
    -------
    list of Finding
        Worst first.
    """
    profile = stack.profile if profile is None else profile
    found = thickness_findings(stack, profile, monitor=monitor)
    found += drain_findings(stack, profile, sealed=sealed, monitor=monitor)
    found += jump_findings(stack, monitor=monitor)
    if part is not None and len(stack.parts) == 1:
        raster = stack.parts[0].raster
        found += design_findings(part, raster, profile, support=stack.support_policy)
    return sorted(found, key=lambda f: SEVERITIES.index(f.severity))


def design_findings(
    part: Part,
    raster: Raster,
    profile: PrintProfile,
    *,
    support: str | None = None,
    name: str = "",
) -> list[Finding]:
    """Checks of one placed part that need its intended zones.

    Parameters
    ----------
    part : Part
    raster : Raster
        Where it lies on the tray.
    profile : PrintProfile
    support : str, optional
        The policy; the profile's if left out. Where the machine adds support, columns are taken
        for it.
    name : str
        Of the part on its tray, for the findings.
    """
    if part.labels.size > MOST_VOXELS:
        return [
            Finding(
                severity="note",
                code="zones not judged",
                message=f"The design has {part.labels.size} voxels; skins, soft walls and slender "
                f"features are judged up to {MOST_VOXELS}.",
                remedy="Check them on a coarser copy of the design.",
                value=float(part.labels.size),
                limit=float(MOST_VOXELS),
                part=name,
            )
        ]
    policy = profile.support_policy if support is None else support
    drawn = support_fill(
        "columns" if policy == "machine" else policy, profile.support_sizes, part, raster
    )
    zones = Zones.of(part, raster)
    found = [*tearing_findings(zones, drawn), *skin_findings(zones)]
    found += slender_findings(zones, drawn)
    return [dataclasses.replace(f, part=name) for f in found]

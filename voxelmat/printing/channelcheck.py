"""Resins against channels, and the manifest against itself and against the design."""

from __future__ import annotations

from collections.abc import Iterator

from voxelmat.model.finding import Finding
from voxelmat.model.part import Part
from voxelmat.model.profile import PrintProfile
from voxelmat.printing.designed import used_resins
from voxelmat.printing.readback import Stack

__all__ = ["channel_findings", "manifest_findings"]


def _stop(code: str, message: str, remedy: str) -> Finding:
    return Finding(severity="stop", code=code, message=message, remedy=remedy)


def channel_findings(stack: Stack, part: Part | None, profile: PrintProfile) -> Iterator[Finding]:
    """A resin that no channel lays, a channel that the printer lacks or loads otherwise."""
    model = [c for c in stack.channels if c.role != "support"]
    again = "Write the stack again for this design and profile."
    if part is not None:
        needed = used_resins(part)
        laid = {c.resin for c in model}
        for resin in needed:
            if resin not in laid:
                yield _stop(
                    "missing channel",
                    f"The design uses '{resin}', which no channel of the stack lays; it has "
                    f"{', '.join(f'{c.name} = {c.resin}' for c in model)}.",
                    again,
                )
        if len(stack.parts) == 1:
            for channel in model:
                if channel.resin not in needed:
                    yield _stop(
                        "unknown resin",
                        f"Channel '{channel.name}' lays '{channel.resin}', which the design does "
                        "not use.",
                        again,
                    )
    for channel in stack.channels:
        if channel.name not in profile.channels:
            yield _stop(
                "missing channel",
                f"Profile '{profile.name}' has no channel '{channel.name}', which the stack needs "
                f"for '{channel.resin}'.",
                "Print on the printer that the stack was written for, or write it again.",
            )
            continue
        loaded = profile.channels[channel.name]
        if channel.role != "support" and loaded and loaded != channel.resin:
            yield _stop(
                "other resin loaded",
                f"Channel '{channel.name}' is loaded with '{loaded}'; the stack lays "
                f"'{channel.resin}' with it.",
                "Load the resin that the stack names, or write it again.",
            )


def manifest_findings(stack: Stack, part: Part | None) -> Iterator[Finding]:
    """Figures of the manifest that contradict each other, or another design."""
    site = float(stack.raster.site_volume)
    for channel in stack.channels:
        if abs(channel.sites * site - channel.volume_mm3) > 1e-6 * max(channel.volume_mm3, site):
            yield _stop(
                "manifest disagrees",
                f"The manifest states {channel.sites} sites for channel '{channel.name}', "
                f"{channel.sites * site:.6g} mm^3, and beside it {channel.volume_mm3:.6g} mm^3.",
                "The manifest was edited; write the stack again.",
            )
    if part is None or len(stack.parts) != 1 or any(stack.profile.bias):
        return
    if stack.support_policy == "skin":  # sliced on a grid with room for it
        return
    if stack.parts[0].digest != part.digest:
        yield Finding(
            severity="warn",
            code="other design",
            message="The stack was written from another state of the design: its SHA-256 "
            "differs from the manifest's.",
            remedy="Write the stack again if the shape or a material has changed.",
        )

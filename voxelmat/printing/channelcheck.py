"""Resins against channels, and the manifest against itself and against the design."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from voxelmat.io.bigpart import AnyPart
from voxelmat.model.finding import Finding
from voxelmat.model.profile import PrintProfile
from voxelmat.printing.designed import used_resins
from voxelmat.printing.readback import Stack
from voxelmat.printing.stackparts import StackPart

__all__ = ["channel_findings", "digest_findings", "manifest_findings"]


def _stop(code: str, message: str, remedy: str) -> Finding:
    return Finding(severity="stop", code=code, message=message, remedy=remedy)


def channel_findings(
    stack: Stack, designs: Sequence[AnyPart], profile: PrintProfile
) -> Iterator[Finding]:
    """A resin that no channel lays, a channel that the printer lacks or loads otherwise.

    `designs` are those of some of the stack's parts.
    """
    model = [c for c in stack.channels if c.role != "support"]
    again = "Write the stack again for this design and profile."
    if designs:
        needed = tuple(dict.fromkeys(r for design in designs for r in used_resins(design)))
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


def manifest_findings(stack: Stack) -> Iterator[Finding]:
    """Figures of the manifest that contradict each other."""
    site = float(stack.raster.site_volume)
    for channel in stack.channels:
        if abs(channel.sites * site - channel.volume_mm3) > 1e-6 * max(channel.volume_mm3, site):
            yield _stop(
                "manifest disagrees",
                f"The manifest states {channel.sites} sites for channel '{channel.name}', "
                f"{channel.sites * site:.6g} mm^3, and beside it {channel.volume_mm3:.6g} mm^3.",
                "The manifest was edited; write the stack again.",
            )


def digest_findings(placed: StackPart, sliced: AnyPart, stack: Stack) -> Iterator[Finding]:
    """Another state of the design than that which the stack was written from."""
    if stack.support_policy == "skin":  # sliced on a grid with room for it
        return
    if placed.digest != sliced.digest:
        yield Finding(
            severity="warn",
            code="other design",
            message="The stack was written from another state of the design: its SHA-256 "
            "differs from the manifest's.",
            remedy="Write the stack again if the shape or a material has changed.",
        )

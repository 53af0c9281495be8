"""What preflight says of single sites: claimed twice, shifted, or counted otherwise."""

from __future__ import annotations

from voxelmat.model.finding import Finding
from voxelmat.printing.readback import Stack
from voxelmat.printing.scan import Facts
from voxelmat.printing.shifted import shifted_channel

__all__ = ["claim_findings"]


def claim_findings(stack: Stack, facts: Facts) -> list[Finding]:
    """Sites claimed twice, a channel that is shifted, other counts than the manifest's."""
    found = []
    if facts.twice.sites and facts.twice.place is not None:
        found.append(
            Finding(
                severity="stop",
                code="two materials",
                message=f"{facts.twice.sites} sites are claimed by more than one material.",
                place_mm=stack.raster.pixel_to_part(*facts.twice.place),
                remedy="Write the stack again.",
                value=facts.twice.sites,
                limit=0,
            )
        )
        move = shifted_channel(stack, facts.twice.place)
        if move is not None:
            name, rows, columns = move
            found.append(
                Finding(
                    severity="stop",
                    code="channel shifted",
                    message=f"The images of channel '{name}' fit the others when moved by "
                    f"{columns} columns and {rows} rows, so this channel is shifted.",
                    place_mm=stack.raster.pixel_to_part(*facts.twice.place),
                    remedy="Write the stack again; do not move one channel's images alone.",
                )
            )
    elif facts.gaps:
        found += _slit(stack, facts)
    for channel, sites in zip(stack.channels, facts.sites, strict=True):
        if sites != channel.sites:
            found.append(
                Finding(
                    severity="stop",
                    code="other count",
                    message=f"Channel '{channel.name}' has {sites} droplet sites; its manifest "
                    f"states {channel.sites}.",
                    remedy="Write the stack again.",
                    value=sites,
                    limit=channel.sites,
                )
            )
    return found


def _slit(stack: Stack, facts: Facts) -> list[Finding]:
    """A slit of one site between two channels, as a shift away from each other leaves it."""
    column, row, layer = facts.gaps[0].place
    move = shifted_channel(stack, (layer, row, column))
    if move is None or max(abs(move[1]), abs(move[2])) > 1:
        return []
    name, rows, columns = move
    return [
        Finding(
            severity="warn",
            code="channel shifted",
            message=f"A slit of one site closes when the images of channel '{name}' are moved by "
            f"{columns} columns and {rows} rows: this channel is shifted, or the design has a slit "
            "that no printer can hold.",
            place_mm=stack.raster.pixel_to_part(layer, row, column),
            remedy="Compare with the design; write the stack again.",
        )
    ]

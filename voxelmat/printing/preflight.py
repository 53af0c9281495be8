"""The checks before printing: a finished stack on disk is read back and judged."""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence
from pathlib import Path

import numpy as np

from voxelmat.model.finding import SEVERITIES, Finding
from voxelmat.model.part import Part
from voxelmat.model.profile import PrintProfile
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.bias import compensated, part_bias
from voxelmat.printing.channelcheck import channel_findings, manifest_findings
from voxelmat.printing.deepcheck import deep_findings, without_repeats
from voxelmat.printing.designed import designed_volumes
from voxelmat.printing.features import piece_findings, small_findings, zone_findings
from voxelmat.printing.filecheck import file_findings, folder_findings, tray_findings
from voxelmat.printing.findmark import mark_findings
from voxelmat.printing.layerdesign import ExpectedLayers
from voxelmat.printing.oddlayers import odd_layer_findings
from voxelmat.printing.outlinecheck import outline_findings
from voxelmat.printing.readback import Stack, read_stack
from voxelmat.printing.scan import Facts, scan
from voxelmat.printing.shifted import shifted_channel
from voxelmat.shape.bodies import Body
from voxelmat.units import quantity

__all__ = ["VOLUME_TOLERANCE", "as_sliced", "preflight"]

#: Printed against designed volume of a resin may differ by so much, beyond what the rounding of
#: the outline to whole sites explains: between voxel centres a curved outline is drawn by chords.
VOLUME_TOLERANCE = 0.02
_NAMED = 3  # findings of one kind that are listed with their place; the rest is counted


def preflight(
    stack: Stack | str | Path,
    part: Part | None = None,
    profile: PrintProfile | None = None,
    *,
    bodies: Sequence[Body] = (),
    deep: bool = True,
    monitor: Monitor = SILENT,
) -> list[Finding]:
    """Check a finished stack.

    Parameters
    ----------
    stack : Stack or path
        Read from disk whatever is passed; every file is compared with its SHA-256.
    part : Part, optional
        The design; without it volumes are those in the manifest, and neither outlines nor layers
        nor thin zones are compared. On a tray of several parts volumes alone are.
    profile : PrintProfile, optional
        The printer; the one in the manifest if left out.
    bodies : sequence of Body, optional
        The meshes of the design, which its outlines are then compared with.
    deep : bool
        Check thickness, ways out of rooms and overhangs in three dimensions too, which takes a
        few times as long as all the rest.
    monitor : Monitor

    Returns
    -------
    list of Finding
        Worst first. Empty where nothing at all was found. Solid is judged against empty, never
        one dithered channel: a lone droplet of one resin inside a blend is as it should be.
    """
    if not isinstance(stack, Stack):
        stack = read_stack(stack)
    printer = stack.profile if profile is None else profile
    found = tray_findings(stack, printer) + folder_findings(stack)
    found += [*channel_findings(stack, part, printer), *manifest_findings(stack, part)]
    alone = part if len(stack.parts) == 1 else None
    sliced = None if alone is None else as_sliced(alone, stack)
    expected = None if sliced is None else ExpectedLayers(stack, sliced, stack.raster)
    facts = scan(
        stack,
        _in_sites(stack, min(printer.minimum.wall, printer.minimum.strut)),
        _in_sites(stack, printer.minimum.gap),
        expected=expected,
        monitor=monitor,
    )
    found += file_findings(stack, facts) + _claims(stack, facts)
    found += odd_layer_findings(stack, facts.differences)
    if not (facts.bad_files or facts.changed_files):
        found += mark_findings(stack, monitor=monitor)
    if expected is not None:
        found += expected.findings()
    if alone is not None and not (facts.bad_files or facts.changed_files):
        found += outline_findings(stack, alone, sliced, bodies=bodies, monitor=monitor)
    found += _volumes(stack, facts, part)
    found += [*piece_findings(stack, facts), *small_findings(stack, facts, printer)]
    if part is not None:
        found += zone_findings(part, printer)
    if deep:
        found += deep_findings(stack, sliced, facts, printer, monitor=monitor)
        found = without_repeats(found)
    found = [_located(stack, f) for f in found]
    return sorted(found, key=lambda f: SEVERITIES.index(f.severity))


def _located(stack: Stack, finding: Finding) -> Finding:
    """On a tray of several parts: name the part, and give the place in its coordinates."""
    if len(stack.parts) == 1 or finding.part or finding.place_mm is None:
        return finding
    raster = stack.raster
    origin = np.array(raster.pixel_to_part(0, 0, 0))
    ends = ((1, 0, 0), (0, 1, 0), (0, 0, 1))
    step = np.stack([np.array(raster.pixel_to_part(*e)) - origin for e in ends], axis=1)
    pixel = np.rint(np.linalg.solve(step, np.array(finding.place_mm) - origin)).astype(int)
    layer, row, column = (int(v) for v in pixel)
    name, place = stack.locate(layer, row, column)
    return dataclasses.replace(finding, part=name, place_mm=place)


def as_sliced(part: Part, stack: Stack) -> Part:
    """The part with its outline compensated for the bias of the printer, as it was sliced."""
    bias = part_bias(stack.profile, stack.parts[0].raster.rotation)
    return compensated(part, stack.profile.replace(bias=bias))  # type: ignore[return-value]


def _in_sites(stack: Stack, size: float) -> tuple[int, int, int]:
    """A size in whole sites along layers, rows and columns, rounded down, at least 1."""
    layer, row, column = (
        max(1, int(size / float(stack.raster.pitch[axis]) + 1e-9))
        for axis, _ in stack.raster.image_axes
    )
    return (layer, row, column)


# ---------------------------------------------------------------- sites and volumes
def _claims(stack: Stack, facts: Facts) -> list[Finding]:
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


def _volumes(stack: Stack, facts: Facts, part: Part | None) -> list[Finding]:
    raster = stack.raster
    designed = stack.designed_mm3
    if part is not None:
        designed.update({r: v for r, v in designed_volumes(part).items() if v > 0})
    rounding = sum(1 / n for n in raster.shape)  # half a site at each of two ends, every axis
    found = []
    printed: dict[str, int] = {}
    for channel, sites in zip(stack.channels, facts.sites, strict=True):
        printed[channel.resin] = printed.get(channel.resin, 0) + sites
    for resin, wanted in designed.items():
        volume = printed.get(resin, 0) * float(raster.site_volume)
        limit = (VOLUME_TOLERANCE + rounding) * wanted
        if abs(volume - wanted) > limit:
            share = abs(volume - wanted) / wanted if wanted else 1.0
            found.append(
                Finding(
                    severity="stop" if share > 5 * (VOLUME_TOLERANCE + rounding) else "warn",
                    code="volume",
                    message=f"'{resin}' takes {quantity(volume, 'mm^3', 4)} in the stack and "
                    f"{quantity(wanted, 'mm^3', 4)} in the design, {100 * share:.2g} % apart.",
                    remedy="Look for a feature that the raster loses; take finer design voxels.",
                    value=volume,
                    limit=wanted,
                    unit="mm^3",
                )
            )
    return found

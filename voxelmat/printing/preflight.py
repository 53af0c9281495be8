"""The checks before printing: a finished stack on disk is read back and judged."""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from voxelmat.errors import InputError
from voxelmat.io.bigpart import AnyPart
from voxelmat.model.deviation import OutlineDeviation
from voxelmat.model.finding import SEVERITIES, Finding
from voxelmat.model.profile import PrintProfile
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.channelcheck import channel_findings, manifest_findings
from voxelmat.printing.deepcheck import deep_findings, without_repeats
from voxelmat.printing.features import piece_findings, small_findings
from voxelmat.printing.filecheck import file_findings, folder_findings, tray_findings
from voxelmat.printing.findmark import mark_findings
from voxelmat.printing.fixes import named_fixes
from voxelmat.printing.oddlayers import odd_layer_findings
from voxelmat.printing.partcheck import part_checks
from voxelmat.printing.readback import Stack, read_stack
from voxelmat.printing.scan import scan
from voxelmat.printing.sitecheck import claim_findings
from voxelmat.printing.volumecheck import volume_findings
from voxelmat.shape.bodies import Body

__all__ = ["StackChecks", "check_stack", "preflight"]


@dataclass(frozen=True, slots=True, kw_only=True)
class StackChecks:
    """What a preflight saw.

    Attributes
    ----------
    findings : tuple of Finding
        Worst first.
    outlines : mapping of str to OutlineDeviation
        How far the outline of each part, by its name in the stack, lies off its design's.
    """

    findings: tuple[Finding, ...]
    outlines: Mapping[str, OutlineDeviation] = field(default_factory=dict)


def preflight(
    stack: Stack | str | Path,
    part: AnyPart | Mapping[str, AnyPart] | None = None,
    profile: PrintProfile | None = None,
    *,
    bodies: Sequence[Body] | Mapping[str, Sequence[Body]] = (),
    deep: bool = True,
    monitor: Monitor = SILENT,
) -> list[Finding]:
    """Check a finished stack; `check_stack` without the figures.

    Returns
    -------
    list of Finding
        Worst first, with the repair that may help. Empty where nothing at all was found. Solid is
        judged against empty, never one dithered channel: a lone droplet of one resin inside a
        blend is as it should be.
    """
    return list(
        check_stack(stack, part, profile, bodies=bodies, deep=deep, monitor=monitor).findings
    )


def check_stack(
    stack: Stack | str | Path,
    part: AnyPart | Mapping[str, AnyPart] | None = None,
    profile: PrintProfile | None = None,
    *,
    bodies: Sequence[Body] | Mapping[str, Sequence[Body]] = (),
    deep: bool = True,
    monitor: Monitor = SILENT,
) -> StackChecks:
    """Check a finished stack.

    Parameters
    ----------
    stack : Stack or path
        Read from disk whatever is passed; every file is compared with its SHA-256.
    part : Part, or mapping of str to Part, optional
        The design of a stack of one part, or the designs of a tray's parts by their names.
        Without it volumes are those in the manifest, and neither outlines nor layers nor zones
        are compared.
    profile : PrintProfile, optional
        The printer; the one in the manifest if left out.
    bodies : sequence of Body, or mapping of str to such, optional
        The meshes of the design, which its outlines are then compared with.
    deep : bool
        Check thickness, ways out of rooms and overhangs in three dimensions too, which takes a
        few times as long as all the rest.
    monitor : Monitor
    """
    if not isinstance(stack, Stack):
        stack = read_stack(stack)
    printer = stack.profile if profile is None else profile
    designs = _by_name(stack, part)
    meshes = bodies if isinstance(bodies, Mapping) else {p.name: bodies for p in stack.parts[:1]}
    found = tray_findings(stack, printer) + folder_findings(stack)
    found += channel_findings(stack, tuple(designs.values()), printer)
    found += manifest_findings(stack)
    checks, left_out = part_checks(stack, designs, meshes)
    found += left_out
    facts = scan(
        stack,
        _in_sites(stack, min(printer.minimum.wall, printer.minimum.strut)),
        _in_sites(stack, printer.minimum.gap),
        expected=[c.expected for c in checks],
        monitor=monitor,
    )
    found += file_findings(stack, facts) + claim_findings(stack, facts)
    found += odd_layer_findings(stack, facts.differences)
    whole = not (facts.bad_files or facts.changed_files)
    if whole:
        found += mark_findings(stack, monitor=monitor)
    outlines = {}
    for check in checks:
        found += check.findings()
        if whole:
            seen, said = check.outline(monitor)
            found += said
            if seen is not None:
                outlines[check.placed.name] = seen
    if not checks or len(stack.parts) > 1:
        found += volume_findings(stack, facts.sites, stack.designed_mm3)
    found += [*piece_findings(stack, facts), *small_findings(stack, facts, printer)]
    for check in checks:
        found += check.zones(printer, deep=deep)
    if deep:
        found += deep_findings(stack, facts, printer, monitor=monitor)
        found = without_repeats(found)
    found = named_fixes([_located(stack, f) for f in found])
    found.sort(key=lambda f: SEVERITIES.index(f.severity))
    return StackChecks(findings=tuple(found), outlines=outlines)


def _by_name(stack: Stack, part: AnyPart | Mapping[str, AnyPart] | None) -> Mapping[str, AnyPart]:
    """The designs by the names of their parts in the stack."""
    if part is None:
        return {}
    if not isinstance(part, Mapping):
        if len(stack.parts) > 1:
            names = ", ".join(p.name for p in stack.parts[:8])
            raise InputError(
                f"The stack holds {len(stack.parts)} parts ({names}): give the design of each by "
                "its name.",
                key="part",
            )
        return {stack.parts[0].name: part}
    there = {p.name for p in stack.parts}
    unknown = [n for n in part if n not in there]
    if unknown:
        raise InputError(f"The stack holds no part '{unknown[0]}'.", key="part")
    return part


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


def _in_sites(stack: Stack, size: float) -> tuple[int, int, int]:
    """A size in whole sites along layers, rows and columns, rounded down, at least 1."""
    layer, row, column = (
        max(1, int(size / float(stack.raster.pitch[axis]) + 1e-9))
        for axis, _ in stack.raster.image_axes
    )
    return (layer, row, column)

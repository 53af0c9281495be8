"""The checks before printing: a finished stack on disk is read back and judged."""

from __future__ import annotations

from pathlib import Path

from voxelmat.model.finding import SEVERITIES, Finding
from voxelmat.model.part import Part
from voxelmat.model.profile import PrintProfile
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.designed import designed_volumes
from voxelmat.printing.features import piece_findings, small_findings, zone_findings
from voxelmat.printing.journal import JOURNAL
from voxelmat.printing.readback import Stack, read_stack
from voxelmat.printing.scan import Facts, scan
from voxelmat.printing.shifted import shifted_channel
from voxelmat.printing.sums import OWN_FILES
from voxelmat.units import quantity

__all__ = ["VOLUME_TOLERANCE", "preflight"]

#: Printed against designed volume of a resin may differ by so much, beyond what the rounding of
#: the outline to whole sites explains: between voxel centres a curved outline is drawn by chords.
VOLUME_TOLERANCE = 0.02
_NAMED = 3  # findings of one kind that are listed with their place; the rest is counted


def preflight(
    stack: Stack | str | Path,
    part: Part | None = None,
    profile: PrintProfile | None = None,
    *,
    monitor: Monitor = SILENT,
) -> list[Finding]:
    """Check a finished stack.

    Parameters
    ----------
    stack : Stack or path
        Read from disk whatever is passed; every file is compared with its SHA-256.
    part : Part, optional
        The design; without it volumes are those in the manifest, and thin zones of one pure
        resin are not looked for.
    profile : PrintProfile, optional
        The printer; the one in the manifest if left out.
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
    found = _tray(stack, printer) + _folder(stack)
    facts = scan(
        stack,
        _in_sites(stack, min(printer.minimum.wall, printer.minimum.strut)),
        _in_sites(stack, printer.minimum.gap),
        monitor=monitor,
    )
    found += _files(stack, facts) + _claims(stack, facts)
    found += _volumes(stack, facts, part)
    found += [*piece_findings(stack, facts), *small_findings(stack, facts, printer)]
    if part is not None:
        found += zone_findings(part, printer)
    return sorted(found, key=lambda f: SEVERITIES.index(f.severity))


def _in_sites(stack: Stack, size: float) -> tuple[int, int, int]:
    """A size in whole sites along layers, rows and columns, rounded down, at least 1."""
    layer, row, column = (
        max(1, int(size / float(stack.raster.pitch[axis]) + 1e-9))
        for axis, _ in stack.raster.image_axes
    )
    return (layer, row, column)


# ---------------------------------------------------------------- tray and files
def _tray(stack: Stack, profile: PrintProfile) -> list[Finding]:
    raster = stack.raster
    found = []
    if profile.pitch != raster.pitch:
        found.append(
            Finding(
                severity="stop",
                code="other pitch",
                message=f"The stack has pitches of {_um(raster.pitch)}; profile "
                f"'{profile.name}' prints {_um(profile.pitch)}, so the part would be distorted.",
                remedy="Write the stack for this profile.",
            )
        )
    margins = (profile.edge_margin, profile.edge_margin, 0.0)
    for axis, margin in enumerate(margins):
        pitch = raster.pitch[axis]
        low = float(raster.offset[axis] * pitch)
        high = float((raster.offset[axis] + raster.shape[axis]) * pitch)
        last = profile.tray_size[axis] - margin
        if low < margin - float(pitch) or high > last + float(pitch):
            found.append(
                Finding(
                    severity="stop",
                    code="outside the tray",
                    message=f"Along {'xyz'[axis]} the stack reaches from {low:.4g} to {high:.4g} "
                    f"mm; the usable tray of '{profile.name}' from {margin:g} to {last:g} mm.",
                    remedy="Move or turn the part, or take a larger printer.",
                    value=high,
                    limit=last,
                    unit="mm",
                )
            )
    return found


def _um(pitch: tuple[object, ...]) -> str:
    return " x ".join(f"{float(p) * 1000:.4g}" for p in pitch) + " um"  # type: ignore[arg-type]


def _folder(stack: Stack) -> list[Finding]:
    """Files that no channel explains."""
    known = {*stack.files.names(), "manifest.json", JOURNAL, *OWN_FILES}
    folders = {name.partition("/")[0] for name in known if "/" in name}
    extra = sorted(p.name for p in stack.folder.iterdir() if p.name not in {*known, *folders})
    for name in sorted(folders):
        if (stack.folder / name).is_dir():
            files = (f"{name}/{p.name}" for p in (stack.folder / name).iterdir())
            extra += sorted(f for f in files if f not in known)
    if not extra:
        return []
    return [
        Finding(
            severity="warn",
            code="extra files",
            message=f"{len(extra)} files do not belong to the stack: {', '.join(extra[:_NAMED])}.",
            remedy="Remove them, so that the printer does not take them for layers.",
            value=len(extra),
            limit=0,
        )
    ]


def _files(stack: Stack, facts: Facts) -> list[Finding]:
    found = [
        Finding(
            severity="stop",
            code="unreadable layer",
            message=text,
            remedy="Write the stack again.",
        )
        for _, _, text in facts.bad_files[:_NAMED]
    ]
    if len(facts.bad_files) > _NAMED:
        found.append(
            Finding(
                severity="stop",
                code="unreadable layer",
                message=f"{len(facts.bad_files)} files in all are missing or unreadable.",
                remedy="Write the stack again.",
                value=len(facts.bad_files),
                limit=0,
            )
        )
    if facts.changed_files:
        layer, channel = facts.changed_files[0]
        found.append(
            Finding(
                severity="stop",
                code="changed layer",
                message=f"{len(facts.changed_files)} files are not those that were written; the "
                f"first is layer {layer} of channel '{stack.channels[channel].name}': its SHA-256 "
                "differs from the manifest's.",
                remedy="Write the stack again.",
                value=len(facts.changed_files),
                limit=0,
            )
        )
    return found


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

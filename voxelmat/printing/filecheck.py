"""A stack's place on the tray and its files: pitch, size, strangers, damage, changes."""

from __future__ import annotations

from voxelmat.model.finding import Finding
from voxelmat.model.profile import PrintProfile
from voxelmat.printing.changedfiles import what_happened
from voxelmat.printing.journal import JOURNAL
from voxelmat.printing.readback import Stack
from voxelmat.printing.scan import Facts
from voxelmat.printing.sums import OWN_FILES

__all__ = ["file_findings", "folder_findings", "tray_findings"]

_NAMED = 3  # findings of one kind that are listed with their place; the rest is counted


def tray_findings(stack: Stack, profile: PrintProfile) -> list[Finding]:
    """Another pitch than the printer's, or a place outside its tray."""
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
    for axis, (first, last) in enumerate(profile.room):
        pitch = raster.pitch[axis]
        low = float(raster.offset[axis] * pitch)
        high = float((raster.offset[axis] + raster.shape[axis]) * pitch)
        if low < first - float(pitch) or high > last + float(pitch):
            found.append(
                Finding(
                    severity="stop",
                    code="outside the tray",
                    message=f"Along {'xyz'[axis]} the stack reaches from {low:.4g} to {high:.4g} "
                    f"mm; the usable tray of '{profile.name}' from {first:g} to {last:g} mm.",
                    remedy="Move or turn the part, or take a larger printer.",
                    value=high,
                    limit=last,
                    unit="mm",
                )
            )
    return found


def _um(pitch: tuple[object, ...]) -> str:
    return " x ".join(f"{float(p) * 1000:.4g}" for p in pitch) + " um"  # type: ignore[arg-type]


def folder_findings(stack: Stack) -> list[Finding]:
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


def file_findings(stack: Stack, facts: Facts) -> list[Finding]:
    """Files that cannot be read, and files that are not those that were written."""
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
        said = [
            f"layer {k} of '{stack.channels[c].name}': {words}"
            for k, c in facts.changed_files[: 2 * _NAMED]
            if (words := what_happened(stack, c, k))
        ]
        found.append(
            Finding(
                severity="stop",
                code="changed layer",
                message=f"{len(facts.changed_files)} files are not those that were written; the "
                f"first is layer {layer} of channel '{stack.channels[channel].name}': its SHA-256 "
                "differs from the manifest's." + (f" {'; '.join(said)}." if said else ""),
                remedy="Write the stack again.",
                value=len(facts.changed_files),
                limit=0,
            )
        )
    return found

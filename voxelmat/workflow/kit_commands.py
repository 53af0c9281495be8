"""The shell command of the test print kit: make it, and read its filled sheet back."""

from __future__ import annotations

from datetime import datetime
from pathlib import Path
from typing import Any

from voxelmat.errors import InputError
from voxelmat.io.atomic import explain_os_error, write_text
from voxelmat.io.materials import Library, load_library
from voxelmat.model.profile import PrintProfile
from voxelmat.monitor import Monitor
from voxelmat.printing.kit_result import kit_result
from voxelmat.printing.kit_rows import plan_kit
from voxelmat.printing.kit_sheet import read_sheet, write_sheet
from voxelmat.printing.profile import load_profile
from voxelmat.printing.stack import write_stack
from voxelmat.printing.testkit import build_kit
from voxelmat.units import number
from voxelmat.workflow.draft_toml import updated_toml
from voxelmat.workflow.kit_page import write_kit_page
from voxelmat.workflow.printroom_commands import parse_day

__all__ = ["kit"]

Answer = tuple[int, dict[str, Any], str]


def kit(
    *,
    profile: str | None,
    out: Path | None,
    read: Path | None,
    scale: float,
    rigid: str | None,
    soft: str | None,
    date: str | None,
    monitor: Monitor,
) -> Answer:
    """A kit with its sheet from a profile, or a new dated profile from a filled sheet."""
    if (profile is None) == (read is None):
        raise InputError("Give either a profile to make a kit of, or --read SHEET.csv.")
    if read is not None:
        return _read(read, out, date)
    return _make(str(profile), Path("kit") if out is None else out, scale, rigid, soft, monitor)


def _loaded(profile: PrintProfile, library: Library, kind: str, default: str) -> str:
    """A resin of that kind that the printer holds, else the default."""
    held = (r for c, r in profile.channels.items() if r and c != profile.support_channel)
    return next((r for r in held if r in library and library[r].kind == kind), default)


def _make(
    name: str, out: Path, scale: float, rigid: str | None, soft: str | None, monitor: Monitor
) -> Answer:
    plan = plan_kit(load_profile(name), scale=scale)
    if (out / "sheet.csv").exists():
        raise InputError(
            f"'{out}' holds a measuring sheet already, perhaps a filled one; name another folder.",
            key="--out",
        )
    library = load_library()
    printer = plan.profile
    hard = library[rigid or _loaded(printer, library, "rigid", "rigid-general")]
    flexible = library[soft or _loaded(printer, library, "elastomer", "elastomer-a40")]
    part = build_kit(plan, hard, flexible)
    try:
        out.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise explain_os_error(out, error) from error
    notes = {"title": f"test kit of {printer.name}", "kit": plan.digest}
    stack = write_stack(part, printer, out / "stack", notes=notes, monitor=monitor)
    page = write_kit_page(plan, out / "sheet.html")
    sheet = write_sheet(plan, out)
    size = " x ".join(number(s) for s in plan.size_mm)
    lines = [
        f"test kit of {printer.name}: {size} mm, {len(plan.rows)} rows, "
        f"{', '.join(r.name for r in part.resins)}",
        f"  stack to print: {stack.folder}",
        f"  sheet to print: {page}",
        f"  sheet to fill in: {sheet}",
    ]
    data = {"stack": str(stack.folder), "page": str(page), "sheet": str(sheet), "kit": plan.digest}
    return 0, data, "\n".join(lines)


def _read(read: Path, out: Path | None, day: str | None) -> Answer:
    today = datetime.now().astimezone().date()
    result = kit_result(read_sheet(read), today if day is None else parse_day(day, "--date"))
    new = result.profile
    target = read.parent / f"{new.name}.toml" if out is None else out
    if target.suffix != ".toml":
        raise InputError(f"A profile is a .toml file; got '{target.name}'.", key="--out")
    if target.exists():
        raise InputError(
            f"'{target.name}' is there already and is not overwritten; give --out a new name, or "
            "--date another day.",
            key="--out",
        )
    head = f"# From a test kit; see 'note'. {'Invented profile. ' if new.invented else ''}\n"
    write_text(target, head.rstrip() + "\n" + updated_toml("", new.as_dict()))
    sizes = new.minimum.as_dict()
    lines = [
        f"new profile: {target}",
        *(f"  smallest {kind}, mm: {value}" for kind, value in sizes.items()),
        f"  bias, mm a side along x, y, z: {', '.join(f'{b:+.4g}' for b in new.bias)}",
        *(f"  note: {text}" for text in result.notes),
    ]
    data = {
        "profile": str(target),
        "name": new.name,
        "minimum_mm": sizes,
        "bias_mm": list(new.bias),
        "notes": list(result.notes),
    }
    return 0, data, "\n".join(lines)

"""The shell command that turns a part or a volume file into another open format."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

from voxelmat.errors import FileFormatError, InputError
from voxelmat.io.bigpart import HEAD, open_big_part
from voxelmat.io.design import load_design
from voxelmat.io.materials import load_library
from voxelmat.io.store import load_part
from voxelmat.io.volumes import export, import_volume
from voxelmat.model.laws import LAWS
from voxelmat.model.part import Part
from voxelmat.model.volume import Volume
from voxelmat.monitor import Monitor

__all__ = ["convert", "part_from"]

Answer = tuple[int, dict[str, Any], str]


def part_from(path: Path, design: Path | None = None) -> Part:
    """A part from its store.

    Parameters
    ----------
    path : Path
        ``part.npz`` or the folder of a run that left one.
    design : Path, optional
        The design that the part was made from; needed where it brings blend curves of its own.

    Raises
    ------
    InputError, FileFormatError
        No part there, a damaged store, or a law that neither the design nor the library has.
    """
    if (path / HEAD).is_file():
        return open_big_part(path).load()
    file = path / "part.npz" if path.is_dir() else path
    if not file.is_file():
        raise InputError(
            "There is no part here: give part.npz, the folder of a finished run, or a volume file.",
            file=str(path),
        )
    if design is not None:
        plan = load_design(design)
        return load_part(
            file, load_library([plan.file(f) for f in plan.material_files]).law(plan.law)
        )
    library = load_library()
    for key in LAWS:
        try:
            return load_part(file, library.law(key))
        except FileFormatError as error:
            if "with the blend law" not in str(error):
                raise
    raise InputError(
        "The part was made with blend curves that are not in the shipped library; give the design "
        "that it was made from with --design.",
        file=str(path),
    )


def _is_store(path: Path) -> bool:
    if path.is_dir():
        return (path / "part.npz").is_file() or (path / HEAD).is_file()
    return path.suffix.lower() == ".npz"


def convert(
    *,
    source: Path,
    target: Path,
    unit: str | None,
    field: str | None,
    smooth: int,
    low: float | None,
    high: float | None,
    design: Path | None,
    monitor: Monitor,
) -> Answer:
    """Part store, run folder or volume file to a volume file or to surfaces."""
    if smooth < 0:
        raise InputError(f"Rounds of smoothing are 0 or more; got {smooth}.", key="--smooth")
    monitor.report("reading", done=0, total=2)
    read: Part | Volume = (
        part_from(source, design)
        if _is_store(source)
        else import_volume(source, unit=unit, field=field)
    )
    monitor.report("writing", done=1, total=2)
    if low is not None or high is not None:
        volume = read if isinstance(read, Volume) else Volume.from_part(read)
        read = volume.thresholded(
            -math.inf if low is None else low, math.inf if high is None else high
        )
    done = export(read, target, smooth=smooth)
    monitor.report("writing", done=2, total=2)
    notes = [*(read.notes if isinstance(read, Volume) else ()), *done.notes]
    shape, h = read.grid.shape, read.grid.spacing
    lines = [
        f"{shape[0]} x {shape[1]} x {shape[2]} voxels of {h[0]:g} x {h[1]:g} x {h[2]:g} mm, "
        f"written as {done.format}:",
        *(f"  {path}" for path in done.files),
        *(f"  note: {note}" for note in notes),
    ]
    data = {
        "format": done.format,
        "files": [str(p) for p in done.files],
        "grid": read.grid.as_dict(),
        "notes": notes,
    }
    return 0, data, "\n".join(lines)

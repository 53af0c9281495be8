"""Where the parts of a tray come from: a design made anew, the run of a design, a part store."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.io.bigpart import AnyPart, open_big_part
from voxelmat.io.design import load_design
from voxelmat.io.materials import load_library
from voxelmat.io.store import load_part
from voxelmat.io.trayfile import TrayPart
from voxelmat.model.design import Design
from voxelmat.model.part import Part
from voxelmat.model.profile import PrintProfile
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.profile import load_profile
from voxelmat.printing.tray import TrayEntry
from voxelmat.workflow.build import Built, build

__all__ = ["PartSources", "part_of_run", "printed_part"]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Source:
    """A part and its design; `built` only where the design was made anew."""

    part: AnyPart
    design: Design | None = None
    built: Built | None = None
    notes: tuple[str, ...] = ()


class PartSources:
    """Loads or makes each part of a tray once.

    Parameters
    ----------
    monitor : Monitor

    Attributes
    ----------
    notes : list of str
        Where each part came from, in words.
    """

    def __init__(self, monitor: Monitor = SILENT) -> None:
        self.notes: list[str] = []
        self._monitor = monitor
        self._known: dict[tuple[Path | None, Path | None], _Source] = {}

    def entry(self, item: TrayPart) -> TrayEntry:
        """What a ``[[part]]`` of a tray file puts on the tray.

        Raises
        ------
        InputError, FileFormatError
            If the part cannot be had.
        """
        key = (item.design or item.store, item.run)
        if key not in self._known:
            self._known[key] = _source(item, self._monitor)
            self.notes += self._known[key].notes
        source = self._known[key]
        design = source.design
        orientation = item.orientation
        if orientation is None:
            printing = None if design is None else design.printing
            orientation = () if printing is None else printing.orientation
        protected = None
        if item.mark == "engraved" and design is not None:
            names = item.protected
            if names is None:
                names = design.optimise.protected if design.optimise is not None else ()
            if names:
                built = source.built or build(design, monitor=self._monitor)
                self._known[key] = replace(source, built=built)
                protected = _protected(built, names)
        return TrayEntry(
            part=source.part,
            name=item.name,
            copies=item.copies,
            orientation=orientation,
            position_mm=item.position_mm,
            may_turn=item.may_turn,
            side=item.side,
            mark=item.mark,
            face=item.face,
            mark_depth_mm=item.mark_depth_mm,
            protected=protected,
        )


def _protected(built: Built, names: Sequence[str]) -> NDArray[np.bool_]:
    """Voxels of some regions."""
    missing = [n for n in names if n not in built.regions]
    if missing:
        raise InputError(
            f"The design has no region '{missing[0]}'; it has {', '.join(built.regions)}.",
            file=built.design.file_name,
            key="protected",
        )
    masks = [built.regions[n].voxels(built.part) for n in names]
    return np.asarray(np.logical_or.reduce(masks), dtype=np.bool_)


def _source(item: TrayPart, monitor: Monitor) -> _Source:
    if item.store is not None:
        return _Source(part=open_big_part(item.store))
    if item.design is None:
        raise InputError("A part needs a design or a store.", key="design")
    design = load_design(item.design)
    if item.run is not None:
        notes = _run_notes(item.run, item.design)
        return _Source(part=part_of_run(design, item.run), design=design, notes=notes)
    built = _made(design, monitor)
    note = f"'{design.name}' was made anew from {item.design.name}."
    return _Source(part=built.part, design=design, built=built, notes=(note,))


def _made(design: Design, monitor: Monitor) -> Built:
    if design.optimise is not None:
        raise InputError(
            f"'{design.name}' is optimised: run it first ('voxelmat run') and name the folder of "
            "that run, or nothing but its start would be printed.",
            file=design.file_name,
            key="optimise",
        )
    return build(design, monitor=monitor)


def part_of_run(design: Design, run: Path) -> Part:
    """The part that the run of a design left in its folder.

    Raises
    ------
    InputError
        If there is none.
    """
    kept = run / "part.npz"
    if not kept.is_file():
        raise InputError(
            f"'{kept}' is missing: give the folder that the design's run wrote to (--out, or 'run' "
            "in a tray file).",
            key="run",
        )
    law = load_library([design.file(f) for f in design.material_files]).law(design.law)
    return load_part(kept, law)


def _run_notes(run: Path, design: Path) -> tuple[str, ...]:
    """What came of the run, and whether its design is newer than that."""
    notes = [f"'{design.name}': the part in '{run.name}' is printed."]
    kept = run / "part.npz"
    if kept.is_file() and kept.stat().st_mtime < design.stat().st_mtime:
        notes.append(
            f"Caution: '{design.name}' was changed after its run in '{run.name}'; run it again "
            "if the change matters."
        )
    verdicts: list[Mapping[str, Any]] = []
    try:
        data = json.loads((run / "result.json").read_text("utf-8"))
        verdicts = [v for v in data.get("verdicts", []) if isinstance(v, dict)]
    except (OSError, ValueError, AttributeError):
        notes.append(f"There is no finished result in '{run.name}', so no verdict is known.")
    failed = [str(v.get("requirement", "?")) for v in verdicts if v.get("status") == "not met"]
    if failed:
        notes.append(f"Caution: not met in that run: {', '.join(failed)}.")
    return tuple(notes)


def printed_part(
    path: str | Path, run: str | Path, *, monitor: Monitor = SILENT
) -> tuple[Part, PrintProfile]:
    """The part of a design as it would be printed, and its profile.

    Parameters
    ----------
    path : str or Path
        The design file.
    run : str or Path
        Folder of the design's run; its part is taken if there is one, else it is made anew.
    monitor : Monitor

    Raises
    ------
    InputError
        If the design names no profile, or is to be optimised and was not run.
    """
    design = load_design(path)
    if design.printing is None:
        raise InputError(
            "The design has no [print] table, so there is nothing to print on. Name a profile.",
            file=str(path),
            key="print",
        )
    name = design.printing.profile
    profile = load_profile(design.file(name) if name.endswith(".toml") else name)
    if (Path(run) / "part.npz").is_file():
        return part_of_run(design, Path(run)), profile
    return _made(design, monitor).part, profile

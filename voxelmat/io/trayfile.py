"""The tray file: which parts are printed together, how often, and how they lie."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from voxelmat.errors import InputError
from voxelmat.io.schema import check_document, read_toml
from voxelmat.provenance import file_digest

__all__ = ["TrayPart", "TrayPlan", "load_tray_file"]


@dataclass(frozen=True, slots=True, kw_only=True)
class TrayPart:
    """One ``[[part]]`` of a tray file; what it leaves out is None.

    Attributes
    ----------
    design, run, store : Path or None
        A design file and the folder of its run, or the folder of a part store.
    orientation : tuple of str or None
        That of the design if left out.
    position_mm : tuple of float or None
    protected : tuple of str or None
        Regions; those that the design's [optimise] table protects if left out.
    name, copies, may_turn, side, mark, face, mark_depth_mm
        As for `voxelmat.printing.tray.TrayEntry`.
    """

    design: Path | None = None
    run: Path | None = None
    store: Path | None = None
    name: str = ""
    copies: int = 1
    orientation: tuple[str, ...] | None = None
    position_mm: tuple[float, float] | None = None
    may_turn: bool = False
    side: str = ""
    mark: str = "tag"
    face: str = ""
    mark_depth_mm: float | None = None
    protected: tuple[str, ...] | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class TrayPlan:
    """All that a tray file says.

    Attributes
    ----------
    name, note : str
    profile : str
        Name of a shipped profile, or the path of a file.
    parts : tuple of TrayPart
    job_number : str
    spacing_mm : float or None
    support : str or None
    seed : int
    marks : bool
    coupons : bool or tuple of str
    invented : bool
    path : Path
    inputs : mapping
        Files as the tray names them, and their SHA-256.
    """

    name: str
    profile: str
    parts: tuple[TrayPart, ...]
    path: Path
    note: str = ""
    job_number: str = ""
    spacing_mm: float | None = None
    support: str | None = None
    seed: int = 0
    marks: bool = True
    coupons: bool | tuple[str, ...] = True
    invented: bool = False
    inputs: Mapping[str, str] = field(default_factory=dict)


def load_tray_file(path: str | Path) -> TrayPlan:
    """Read and check a tray file.

    Paths in it start from its own folder.

    Raises
    ------
    InputError
        If a key is unknown, missing or wrong, or a file that it names is not there.
    FileFormatError
        If it is not TOML.
    """
    path = Path(path)
    data = read_toml(path)
    check_document(data, "tray", file=str(path))
    folder = path.parent
    inputs = {path.name: file_digest(path)}
    profile = data["profile"]
    if profile.endswith(".toml"):
        inputs[profile] = _digest(folder / profile, path, "profile")
        profile = str(folder / profile)
    parts = []
    for n, entry in enumerate(data["part"]):
        parts.append(_part(entry, path, f"part[{n}]"))
        if "design" in entry:
            design = folder / entry["design"]
            inputs[entry["design"]] = _digest(design, path, f"part[{n}].design")
    plain = ("name", "note", "job_number", "support", "seed", "marks", "invented")
    spacing = data.get("spacing_mm")
    coupons = data.get("coupons", True)
    return TrayPlan(
        **{k: data[k] for k in plain if k in data},
        profile=profile,
        parts=tuple(parts),
        path=path,
        spacing_mm=None if spacing is None else float(spacing),
        coupons=coupons if isinstance(coupons, bool) else tuple(coupons),
        inputs=inputs,
    )


def _digest(file: Path, path: Path, key: str) -> str:
    if not file.is_file():
        raise InputError(
            f"There is no file '{file}'; paths start from the tray file.", file=str(path), key=key
        )
    return file_digest(file)


def _part(entry: Mapping[str, Any], path: Path, key: str) -> TrayPart:
    if ("design" in entry) == ("store" in entry):
        raise InputError(
            "A part comes either from a design file (design = ..) or from a part store "
            "(store = ..).",
            file=str(path),
            key=key,
        )
    if "run" in entry and "design" not in entry:
        raise InputError(
            "A run's folder goes with its design file.", file=str(path), key=f"{key}.run"
        )
    if entry.get("protected") and "design" not in entry:
        raise InputError(
            "Regions are those of a design; a part store has none.",
            file=str(path),
            key=f"{key}.protected",
        )
    values: dict[str, Any] = dict(entry)
    for name in ("design", "run", "store"):
        if name in values:
            values[name] = path.parent / values[name]
    for name in ("orientation", "protected"):
        if name in values:
            values[name] = tuple(values[name])
    if "position_mm" in values:
        x, y = values["position_mm"]
        values["position_mm"] = (float(x), float(y))
    return TrayPart(**values)

"""Resins and blend curves from TOML: the shipped library, and what a design brings of its own."""

from __future__ import annotations

import difflib
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from voxelmat.errors import InputError, ResourceError
from voxelmat.io.schema import check_document, read_toml
from voxelmat.model.curve import PairCurve
from voxelmat.model.laws import LAWS, BlendLaw, CalibratedCurve
from voxelmat.model.material import Constant, Material
from voxelmat.provenance import file_digest
from voxelmat.units import DENSITY_G_CM3, number

__all__ = ["Library", "load_curve", "load_library", "load_material", "materials_folder"]

#: Key in the file to field of `Material`, factor to the inside unit, and that unit.
_CONSTANTS = {
    "E_MPa": ("E", 1.0, "MPa"),
    "nu": ("nu", 1.0, ""),
    "density_g_cm3": ("density", DENSITY_G_CM3, "tonne/mm^3"),
    "strength_MPa": ("strength", 1.0, "MPa"),
    "elongation_percent": ("elongation", 0.01, ""),
    "expansion_um_per_m_K": ("expansion", 1e-6, "1/K"),
    "conductivity_W_per_m_K": ("conductivity", 1.0, "W/(m K)"),
    "heat_capacity_J_per_kg_K": ("heat_capacity", 1.0, "J/(kg K)"),
    "loss_factor": ("loss_factor", 1.0, ""),
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Library(Mapping[str, Material]):
    """Materials by name, and the blend curves between them.

    Attributes
    ----------
    materials : mapping of str to Material
    curves : tuple of PairCurve
    notes : tuple of str
        What was replaced, and which curves do not fit the resins that they join.
    digests : mapping of str to str
        File name to SHA-256 of the files that a design brought.
    """

    materials: Mapping[str, Material]
    curves: tuple[PairCurve, ...] = ()
    notes: tuple[str, ...] = ()
    digests: Mapping[str, str] = field(default_factory=dict)

    def __getitem__(self, name: str) -> Material:
        if name in self.materials:
            return self.materials[name]
        near = difflib.get_close_matches(name, self.materials, n=1)
        tip = f" Did you mean '{near[0]}'?" if near else ""
        raise InputError(
            f"There is no material '{name}'.{tip} Known: {', '.join(sorted(self.materials))}."
        )

    def __iter__(self) -> Iterator[str]:
        return iter(self.materials)

    def __len__(self) -> int:
        return len(self.materials)

    def __contains__(self, name: object) -> bool:
        return name in self.materials

    def curve(self, a: str, b: str) -> PairCurve | None:
        """The blend curve between two resins, in either order, or None."""
        return next((c for c in self.curves if c.pair == {a, b}), None)

    def law(self, key: str, *, side: str = "value") -> BlendLaw:
        """The blend law of that key, with this library's curves where it takes some.

        Parameters
        ----------
        key : str
            ``"calibrated"``, ``"log-mix"``, ``"self-consistent"``, ``"voigt"``, ``"reuss"``,
            ``"hashin-shtrikman-lower"`` or ``"hashin-shtrikman-upper"``.
        side : str
            For ``"calibrated"``: ``"value"``, ``"low"`` or ``"high"``.
        """
        if key not in LAWS:
            near = difflib.get_close_matches(key, LAWS, n=1)
            tip = f" Did you mean '{near[0]}'?" if near else ""
            raise InputError(f"There is no blend law '{key}'; use one of {', '.join(LAWS)}.{tip}")
        if key == CalibratedCurve.key:
            return CalibratedCurve(curves=self.curves, side=side)
        return LAWS[key]()


def materials_folder() -> Path:
    """The shipped library: inside the installed package, or beside it in a checkout.

    Raises
    ------
    ResourceError
        If neither is there.
    """
    package = Path(__file__).resolve().parents[1]
    for folder in (package / "_materials", package.parent / "materials"):
        if folder.is_dir():
            return folder
    raise ResourceError("The shipped materials are missing; install voxelmat again.")


def _constant(data: Mapping[str, Any], key: str, file: str) -> Constant:
    _, factor, unit = _CONSTANTS[key]
    entry = data[key]
    low, value, high = entry["low"], entry["value"], entry["high"]
    if not low <= value <= high:
        raise InputError(
            f"A value lies within its range, low <= value <= high; got low {low}, value {value}, "
            f"high {high}.",
            file=file,
            key=key,
        )
    return Constant(
        value=value * factor,
        low=low * factor,
        high=high * factor,
        unit=unit,
        source=entry["source"],
        temperature_degC=entry["temperature_degC"],
        rate_per_s=entry.get("rate_per_s"),
    )


def _plain(data: Mapping[str, Any], key: str, file: str) -> float | None:
    """The value of an entry that `Material` keeps as a bare number, its range checked."""
    if key not in data:
        return None
    entry = data[key]
    if not entry["low"] <= entry["value"] <= entry["high"]:
        raise InputError(
            f"A value lies within its range, low <= value <= high; got low {entry['low']}, "
            f"value {entry['value']}, high {entry['high']}.",
            file=file,
            key=key,
        )
    return float(entry["value"])


def _conditions(data: Mapping[str, Any], file: str) -> dict[str, Any]:
    given = data.get("conditions")
    if given is None:
        return {}
    low, high = float(given["temperature_min_degC"]), float(given["temperature_max_degC"])
    if not low <= high:
        raise InputError(
            f"temperature_min_degC {low} lies above temperature_max_degC {high}; swap them.",
            file=file,
            key="conditions.temperature_min_degC",
        )
    out: dict[str, Any] = {"temperature_range_degC": (low, high)}
    out |= {k: given[k] for k in ("max_duration_s", "max_cycles") if k in given}
    return out


def _material(data: Mapping[str, Any], file: str) -> Material:
    check_document(data, "material", file=file)
    constants: dict[str, Any] = {
        _CONSTANTS[key][0]: _constant(data, key, file) for key in _CONSTANTS if key in data
    }
    rest: dict[str, Any] = {k: data[k] for k in ("colour", "cost_per_kg", "notes") if k in data}
    try:
        return Material(
            name=data["name"],
            kind=data["kind"],
            shore_A=_plain(data, "shore_A", file),
            glass_transition_degC=_plain(data, "glass_transition_degC", file),
            **constants,
            **rest,
            **_conditions(data, file),
        )
    except InputError as error:
        raise InputError(error.message, file=error.file or file, key=error.key) from None


def _curve(data: Mapping[str, Any], file: str) -> PairCurve:
    check_document(data, "blend_curve", file=file)
    lists = {"fraction": "fraction", "E": "E_MPa", "E_low": "E_low_MPa", "E_high": "E_high_MPa"}
    values: dict[str, Any] = {field: tuple(map(float, data[key])) for field, key in lists.items()}
    rest: dict[str, Any] = {
        k: data[k] for k in ("temperature_degC", "rate_per_s", "source", "notes") if k in data
    }
    try:
        return PairCurve(
            first=data["first"],
            second=data["second"],
            nu=tuple(map(float, data.get("nu", ()))),
            **values,
            **rest,
        )
    except InputError as error:
        raise InputError(error.message, file=file, key=error.key) from None


def load_material(path: str | Path) -> Material:
    """Read one material.

    Parameters
    ----------
    path : path
        A TOML file after the schema ``material.json``.

    Raises
    ------
    InputError, FileFormatError, ResourceError
        With file and key.
    """
    path = Path(path)
    return _material(read_toml(path), str(path))


def load_curve(path: str | Path) -> PairCurve:
    """Read one blend curve, after the schema ``blend_curve.json``; errors as `load_material`."""
    path = Path(path)
    return _curve(read_toml(path), str(path))


def _toml_files(path: Path) -> list[Path]:
    if not path.is_dir():
        return [path]
    found = sorted(path.glob("*.toml")) + sorted((path / "curves").glob("*.toml"))
    if not found:
        raise InputError("This folder holds no *.toml files.", file=str(path))
    return found


class _Shelf:
    """Collects materials and curves, later ones over earlier ones, with notes."""

    def __init__(self) -> None:
        self.materials: dict[str, Material] = {}
        self.curves: dict[frozenset[str], PairCurve] = {}
        self.files: dict[frozenset[str] | str, str] = {}
        self.notes: list[str] = []

    def read(self, path: Path, *, own: bool) -> None:
        data = read_toml(path)
        file = str(path)
        if "first" in data or "second" in data:
            curve = _curve(data, file)
            what, key = f"blend curve {curve.first} + {curve.second}", curve.pair
            known = curve.pair in self.curves
            self.curves[curve.pair] = curve
            self._note(what, key, path, known, own)
        else:
            material = _material(data, file)
            known = material.name in self.materials
            self.materials[material.name] = material
            self._note(f"material {material.name}", material.name, path, known, own)

    def _note(
        self, what: str, key: frozenset[str] | str, path: Path, known: bool, own: bool
    ) -> None:
        if known and not own:
            raise InputError(f"The {what} is in {self.files[key]} too.", file=str(path))
        if known:
            self.notes.append(f"The {what} of {path.name} replaces that of {self.files[key]}.")
        self.files[key] = path.name

    def check_curves(self) -> None:
        """Curves join known resins; a note where a resin has left the curve's end."""
        for curve in self.curves.values():
            for name, modulus in ((curve.first, curve.E[0]), (curve.second, curve.E[-1])):
                if name not in self.materials:
                    near = difflib.get_close_matches(name, self.materials, n=1)
                    tip = f" Did you mean '{near[0]}'?" if near else ""
                    raise InputError(
                        f"The blend curve {curve.first} + {curve.second} names resin '{name}', "
                        f"which is not known.{tip}",
                        file=self.files[curve.pair],
                        key="first" if name == curve.first else "second",
                    )
                E = self.materials[name].E
                if not E.band[0] <= modulus <= E.band[1]:
                    self.notes.append(
                        f"The blend curve {curve.first} + {curve.second} was taken with {name} at "
                        f"{number(modulus)} MPa, outside its range of {number(E.band[0])} to "
                        f"{number(E.band[1])} MPa: only the curve's shape is used."
                    )


def load_library(extra: Sequence[str | Path] = ()) -> Library:
    """The shipped materials and blend curves, with a design's own added or put in their place.

    Parameters
    ----------
    extra : sequence of path
        TOML files (a material or a blend curve each) or folders of such.

    Returns
    -------
    Library
        Its `notes` say what was replaced.

    Raises
    ------
    InputError, FileFormatError, ResourceError
        With file and key.
    """
    shelf = _Shelf()
    for path in _toml_files(materials_folder()):
        shelf.read(path, own=False)
    digests = {}
    for given in extra:
        for path in _toml_files(Path(given)):
            shelf.read(path, own=True)
            digests[path.name] = file_digest(path)
    shelf.check_curves()
    return Library(
        materials=shelf.materials,
        curves=tuple(shelf.curves.values()),
        notes=tuple(shelf.notes),
        digests=digests,
    )

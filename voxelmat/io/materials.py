"""Resins, blend curves and bonds from TOML: the shipped library, and what a design brings."""

from __future__ import annotations

import difflib
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from voxelmat.errors import InputError, ResourceError
from voxelmat.io.bonds import bond_from, is_bond
from voxelmat.io.schema import check_document, read_toml
from voxelmat.model.curve import PairCurve
from voxelmat.model.interface import Bond
from voxelmat.model.laws import LAWS, BlendLaw, CalibratedCurve
from voxelmat.model.material import Constant, Material, TemperatureFactor
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
    """Materials by name, the blend curves between them and the strength of their interfaces.

    Attributes
    ----------
    materials : mapping of str to Material
    curves : tuple of PairCurve
    bonds : tuple of Bond
        Strengths of interfaces; a pair without one has none.
    notes : tuple of str
        What was replaced, and which curves do not fit the resins that they join.
    digests : mapping of str to str
        File name to SHA-256 of the files that a design brought.
    """

    materials: Mapping[str, Material]
    curves: tuple[PairCurve, ...] = ()
    bonds: tuple[Bond, ...] = ()
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


def _course(data: Mapping[str, Any], file: str) -> TemperatureFactor | None:
    given = data.get("strength_over_temperature")
    if given is None:
        return None
    try:
        return TemperatureFactor(
            temperature_degC=tuple(map(float, given["temperature_degC"])),
            factor=tuple(map(float, given["factor"])),
            source=given["source"],
        )
    except InputError as error:
        raise InputError(error.message, file=file, key="strength_over_temperature") from None


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
            strength_over_temperature=_course(data, file),
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
    found = sorted(path.glob("*.toml"))
    for below in ("curves", "bonds"):
        found += sorted((path / below).glob("*.toml"))
    if not found:
        raise InputError("This folder holds no *.toml files.", file=str(path))
    return found


class _Shelf:
    """Collects materials, curves and bonds, later ones over earlier ones, with notes."""

    def __init__(self) -> None:
        self.materials: dict[str, Material] = {}
        self.curves: dict[frozenset[str], PairCurve] = {}
        self.bonds: dict[frozenset[str], Bond] = {}
        self.files: dict[tuple[str, frozenset[str]], str] = {}
        self.notes: list[str] = []

    def read(self, path: Path, *, own: bool) -> None:
        data = read_toml(path)
        file = str(path)
        if is_bond(data):
            bond = bond_from(data, file)
            self._note("bond", bond.pair, path, bond.pair in self.bonds, own)
            self.bonds[bond.pair] = bond
        elif "first" in data or "second" in data:
            curve = _curve(data, file)
            self._note("blend curve", curve.pair, path, curve.pair in self.curves, own)
            self.curves[curve.pair] = curve
        else:
            material = _material(data, file)
            name = material.name
            self._note("material", frozenset({name}), path, name in self.materials, own)
            self.materials[name] = material

    def _note(self, kind: str, key: frozenset[str], path: Path, known: bool, own: bool) -> None:
        what = f"{kind} {' + '.join(sorted(key))}"
        before = self.files.get((kind, key))
        if known and not own:
            raise InputError(f"The {what} is in {before} too.", file=str(path))
        if known:
            self.notes.append(f"The {what} of {path.name} replaces that of {before}.")
        self.files[kind, key] = path.name

    def _known(self, name: str, kind: str, pair: frozenset[str], key: str) -> Material:
        """The resin that a curve or a bond names."""
        if name in self.materials:
            return self.materials[name]
        near = difflib.get_close_matches(name, self.materials, n=1)
        tip = f" Did you mean '{near[0]}'?" if near else ""
        raise InputError(
            f"The {kind} {' + '.join(sorted(pair))} names resin '{name}', which is not known.{tip}",
            file=self.files[kind, pair],
            key=key,
        )

    def check_pairs(self) -> None:
        """Curves and bonds join known resins; a note where a resin has left the curve's end."""
        for bond in self.bonds.values():
            for key, name in (("first", bond.first), ("second", bond.second)):
                self._known(name, "bond", bond.pair, key)
        for curve in self.curves.values():
            ends = (("first", curve.first, curve.E[0]), ("second", curve.second, curve.E[-1]))
            for key, name, modulus in ends:
                E = self._known(name, "blend curve", curve.pair, key).E
                if not E.band[0] <= modulus <= E.band[1]:
                    self.notes.append(
                        f"The blend curve {curve.first} + {curve.second} was taken with {name} at "
                        f"{number(modulus)} MPa, outside its range of {number(E.band[0])} to "
                        f"{number(E.band[1])} MPa: only the curve's shape is used."
                    )


def load_library(extra: Sequence[str | Path] = ()) -> Library:
    """The shipped materials, curves and bonds, with a design's own added or put in their place.

    Parameters
    ----------
    extra : sequence of path
        TOML files (a material, a blend curve or a bond each) or folders of such.

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
    shelf.check_pairs()
    return Library(
        materials=shelf.materials,
        curves=tuple(shelf.curves.values()),
        bonds=tuple(shelf.bonds.values()),
        notes=tuple(shelf.notes),
        digests=digests,
    )

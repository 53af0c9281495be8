"""The strength of an interface between two resins from TOML."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

from voxelmat.errors import InputError
from voxelmat.io.schema import check_document, read_toml
from voxelmat.model.interface import Bond
from voxelmat.model.material import Constant

__all__ = ["bond_from", "is_bond", "load_bond"]


def is_bond(data: Mapping[str, Any]) -> bool:
    """Whether parsed TOML is a bond's record and not a material or a blend curve."""
    return any(key in data for key in ("tensile_MPa", "shear_MPa"))


def _constant(data: Mapping[str, Any], key: str, file: str) -> Constant:
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
        value=value,
        low=low,
        high=high,
        unit="MPa",
        source=entry["source"],
        temperature_degC=entry["temperature_degC"],
        rate_per_s=entry.get("rate_per_s"),
    )


def bond_from(data: Mapping[str, Any], file: str) -> Bond:
    """Check parsed TOML and make a record of it; `InputError` names file and key."""
    check_document(data, "bond", file=file)
    try:
        return Bond(
            first=data["first"],
            second=data["second"],
            tensile=_constant(data, "tensile_MPa", file),
            shear=_constant(data, "shear_MPa", file),
            notes=data.get("notes", ""),
        )
    except InputError as error:
        raise InputError(error.message, file=file, key=error.key) from None


def load_bond(path: str | Path) -> Bond:
    """Read one record after the schema ``bond.json``.

    Raises
    ------
    InputError, FileFormatError, ResourceError
        With file and key.
    """
    path = Path(path)
    return bond_from(read_toml(path), str(path))

"""The tables of a design that concern printing and measuring: how, and what is measured."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from voxelmat.errors import InputError
from voxelmat.model.design import PrintEntry
from voxelmat.model.halftone import Halftone
from voxelmat.model.inspection import KINDS, Dimension

__all__ = ["dimension_entry", "print_entry"]

Table = Mapping[str, Any]


def _three(values: Any) -> Any:
    return tuple(float(v) for v in values)


def print_entry(table: Table) -> PrintEntry:
    """The ``[print]`` table of a design."""
    widths: Any = table.get("interface_width_mm", 0.0)
    if "interface" in table:
        if "interface_width_mm" in table:
            raise InputError(
                "Give one width for all interfaces, or one for each pair; not both.",
                key="print.interface_width_mm",
            )
        widths = {(p["first"], p["second"]): p["width_mm"] for p in table["interface"]}
    order: Any = table.get("order", "stiffness")
    try:
        halftone = Halftone(
            method=table.get("halftone", "blue noise"),
            order=order if isinstance(order, str) else tuple(order),
            interface_width_mm=widths,
        )
    except InputError as error:
        raise InputError(error.message, key=f"print.{error.key}") from None
    return PrintEntry(
        profile=table["profile"],
        orientation=tuple(table.get("orientation", ())),
        position_mm=_three(table["position_mm"]) if "position_mm" in table else None,
        support=table.get("support"),
        halftone=halftone,
        job_number=table.get("job_number", ""),
    )


def dimension_entry(table: Table, index: int) -> Dimension:
    """One ``[[dimension]]`` table of a design; its keys state the unit of its kind."""
    key = f"dimension[{index}]"
    unit = KINDS[table["kind"]].replace("^", "")
    figures: dict[str, Any] = {}
    for name in ("nominal", "lower", "upper"):
        wanted = f"{name}_{unit}"
        if wanted not in table:
            raise InputError(f"A dimension of kind '{table['kind']}' takes {wanted}.", key=key)
        figures[name] = float(table[wanted])
    known = {"name", "kind", "point_mm", "direction", "low_mm", "high_mm", "resin"}
    for extra in table.keys() - known - {f"{n}_{unit}" for n in figures}:
        raise InputError(
            f"A dimension of kind '{table['kind']}' is in {unit}; {extra} does not go with it.",
            key=f"{key}.{extra}",
        )
    points: dict[str, Any] = {
        k: _three(table[k]) for k in ("point_mm", "direction", "low_mm", "high_mm") if k in table
    }
    try:
        return Dimension(
            name=table["name"],
            kind=table["kind"],
            resin=table.get("resin", ""),
            **figures,
            **points,
        )
    except InputError as error:
        raise InputError(error.message, key=f"{key}.{error.key}") from None

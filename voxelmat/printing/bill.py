"""The bill of materials of a print: what of each resin is laid, flushed, lost, and paid for."""

from __future__ import annotations

import csv
import io
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

from voxelmat.io.atomic import write_text
from voxelmat.model.process import ProcessFigures

__all__ = ["ASSUMED_DENSITY", "BillRow", "bill_row", "write_bom_csv"]

#: Density taken for a resin, nearly always the support, whose own is not known, tonne/mm^3.
#: Indicative, ours: that of the generic soluble support among the shipped materials.
ASSUMED_DENSITY = 1.12e-9


@dataclass(frozen=True, slots=True, kw_only=True)
class BillRow:
    """One resin.

    Attributes
    ----------
    resin : str
    channels : tuple of str
    role : str
        "model" or "support".
    volume_mm3 : float
    droplets : float
        Volume over the volume of one droplet of this resin.
    density_g_cm3 : float
    density_assumed : bool
        True where the density is `ASSUMED_DENSITY`.
    printed_g, waste_g, purge_g, needed_g : float
        In the part or its support; lost at the leveller and in cleaning; flushed; their sum.
    cost_per_kg, cost : float or None
        None where the price is not known.
    cost_unit : str
    """

    resin: str
    channels: tuple[str, ...]
    role: str
    volume_mm3: float
    droplets: float
    density_g_cm3: float
    density_assumed: bool
    printed_g: float
    waste_g: float
    purge_g: float
    needed_g: float
    cost_per_kg: float | None
    cost: float | None
    cost_unit: str


def bill_row(
    process: ProcessFigures,
    resin: str,
    channels: Sequence[str],
    role: str,
    volume_mm3: float,
    density_t_mm3: float | None,
) -> BillRow:
    """The row of one resin, from its volume in the stack."""
    density = ASSUMED_DENSITY if density_t_mm3 is None else density_t_mm3
    printed = volume_mm3 * density * 1e6
    waste, purge = printed * process.waste_fraction, process.purge_of(resin)
    price = process.cost_per_kg.get(resin)
    needed = printed + waste + purge
    return BillRow(
        resin=resin,
        channels=tuple(channels),
        role=role,
        volume_mm3=volume_mm3,
        droplets=volume_mm3 / (process.droplet_of(resin) * 1e-6),
        density_g_cm3=density * 1e9,
        density_assumed=density_t_mm3 is None,
        printed_g=printed,
        waste_g=waste,
        purge_g=purge,
        needed_g=needed,
        cost_per_kg=price,
        cost=None if price is None else needed / 1000 * price,
        cost_unit=process.cost_unit,
    )


_COLUMNS: Mapping[str, str] = {
    "resin": "resin",
    "channels": "channels",
    "role": "role",
    "volume_mm3": "volume_mm3",
    "droplets": "droplets",
    "density_g_cm3": "density_g_cm3",
    "density_assumed": "density_basis",
    "printed_g": "printed_g",
    "waste_g": "waste_g",
    "purge_g": "purge_g",
    "needed_g": "needed_g",
    "cost_per_kg": "cost_per_kg",
    "cost": "cost",
    "cost_unit": "cost_unit",
}


def _cell(row: BillRow, key: str) -> str:
    value = getattr(row, key)
    if key == "density_assumed":
        return "assumed" if value else "material file"
    if value is None:
        return ""
    if isinstance(value, tuple):
        return " ".join(value)
    return f"{value:.6g}" if isinstance(value, float) else str(value)


def write_bom_csv(rows: Sequence[BillRow], path: str | Path) -> Path:
    """Write a bill of materials as CSV (RFC 4180), whole or not at all.

    Raises
    ------
    ResourceError
        If the file cannot be written.
    """
    text = io.StringIO(newline="")
    table = csv.writer(text)
    table.writerow(_COLUMNS.values())
    table.writerows([_cell(row, key) for key in _COLUMNS] for row in rows)
    write_text(Path(path), text.getvalue())
    return Path(path)

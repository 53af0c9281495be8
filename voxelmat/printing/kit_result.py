"""From a filled measuring sheet to a new, dated profile: smallest sizes and bias."""

from __future__ import annotations

import re
from dataclasses import dataclass
from datetime import date
from typing import Any

from voxelmat.errors import InputError
from voxelmat.model.minimum_sizes import MinimumSizes
from voxelmat.model.profile import PrintProfile
from voxelmat.printing.kit_rows import TESTED
from voxelmat.printing.kit_sheet import FilledRow, FilledSheet

__all__ = ["KitResult", "kit_result"]

#: Deviations of one axis that differ by more than this, mm, say that more than a bias is wrong.
#: Ours: about what a calliper repeats to, three times.
SCATTER = 0.06


@dataclass(frozen=True, slots=True, kw_only=True)
class KitResult:
    """A new profile, and what to know of it.

    Attributes
    ----------
    profile : PrintProfile
        Of a new, dated name.
    notes : tuple of str
        What could not be told from the sheet, and what looks odd in it.
    """

    profile: PrintProfile
    notes: tuple[str, ...]


def kit_result(sheet: FilledSheet, day: date) -> KitResult:
    """Judge a sheet.

    A smallest size is the smallest of the kit that was made and above which all were made. The
    bias is half the mean deviation of the bars along an axis, added to the bias that the kit
    was printed with, because the slicer has taken that one off already.

    Parameters
    ----------
    sheet : FilledSheet
    day : date
        Of the measurement; part of the new name.

    Raises
    ------
    InputError
        If of some feature not even the largest was made.
    """
    old = sheet.profile
    notes: list[str] = []
    sizes: dict[str, Any] = {"feature": old.minimum.xyz("feature")}
    for kind, axes in TESTED:
        found = [_smallest(sheet, kind, axis, notes) for axis in axes or ("",)]
        sizes[kind] = found[0] if len(set(found)) == 1 else tuple(found)
    minimum = MinimumSizes.of(**sizes)
    bias = [_bias(sheet, axis, notes) for axis in range(3)]
    words = (
        f"Smallest sizes and bias from test kit {sheet.kit[:12]} of profile '{old.name}', "
        f"measured {day.isoformat()}."
    )
    profile = old.replace(
        name=_dated(old.name, day),
        minimum=minimum,
        bias=(bias[0], bias[1], bias[2]),
        note=" ".join(t for t in (_without_kit(old.note), words) if t),
    )
    return KitResult(profile=profile, notes=tuple(notes))


def _dated(name: str, day: date) -> str:
    """The name without an earlier date, with the new one, at most 32 characters."""
    stem = re.sub(r"-\d{4}-\d{2}-\d{2}$", "", name)[:21].rstrip("-_")
    return f"{stem}-{day.isoformat()}"


def _without_kit(note: str) -> str:
    """A note without what an earlier kit has added."""
    return re.sub(r" ?Smallest sizes and bias from test kit [^.]*\.", "", note)


def _smallest(sheet: FilledSheet, kind: str, axis: str, notes: list[str]) -> float:
    rows = [r for r in sheet.rows if (r.row.kind, r.row.axis) == (kind, axis)]
    rows.sort(key=lambda r: r.row.nominal_mm, reverse=True)
    label = f"{kind} {axis}".strip()
    good: list[FilledRow] = []
    for row in rows:
        if not row.made:
            break
        good.append(row)
    if not good:
        raise InputError(
            f"Not even the largest {label}, {rows[0].row.nominal_mm:g} mm, was made, so its "
            "smallest size is not known. Print a kit of a larger scale.",
            key=rows[0].row.name,
        )
    odd = [r.row.name for r in rows[len(good) :] if r.made]
    if odd:
        notes.append(f"{', '.join(odd)} came out although a larger one did not; taken as chance.")
    if len(good) == len(rows):
        notes.append(
            f"Every {label} was made, down to {good[-1].row.nominal_mm:.4g} mm; smaller ones may "
            "be too."
        )
    return good[-1].row.nominal_mm


def _bias(sheet: FilledSheet, axis: int, notes: list[str]) -> float:
    name = "xyz"[axis]
    found = [
        (r.row.nominal_mm, r.measured_mm - r.row.nominal_mm)
        for r in sheet.rows
        if r.row.kind == "dimension" and r.row.axis == name and r.measured_mm is not None
    ]
    deviations = [d for _, d in found]
    if max(deviations) - min(deviations) > SCATTER:
        told = ", ".join(f"{d:+.3f} at {n:g}" for n, d in found)
        notes.append(
            f"Along {name} the deviations differ ({told} mm): a bias alone does not explain them; "
            "measure again, or look for a wrong pitch."
        )
    residual = sum(deviations) / len(deviations) / 2
    return round(sheet.profile.bias[axis] + residual, 4)

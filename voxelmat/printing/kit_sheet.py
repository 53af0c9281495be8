"""The measuring sheet of a test print kit: written to be filled in, read back with every doubt."""

from __future__ import annotations

import csv
import io
import json
import math
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from voxelmat.errors import InputError
from voxelmat.io.atomic import write_json, write_text
from voxelmat.model.profile import PrintProfile
from voxelmat.printing.kit_rows import KitPlan, KitRow

__all__ = ["KIT_FILE", "FilledRow", "FilledSheet", "read_sheet", "write_sheet"]

#: Beside the sheet: which kit it belongs to, and the profile that the kit was made from.
KIT_FILE = "kit.json"
_FORMAT = "voxelmat-test-kit"
_COLUMNS = ("row", "kind", "axis", "nominal_mm", "made", "measured_mm", "note")
_YES, _NO = ("yes", "y", "1"), ("no", "n", "0")
_NAMED = 3  # rows that an error lists; the rest is counted
#: A measured length further from its nominal than this share, and than 0.5 mm, is a slip. Ours.
_SLIP = 0.2


@dataclass(frozen=True, slots=True, kw_only=True)
class FilledRow:
    """One row as it was filled in: `made` for features, `measured_mm` for dimensions."""

    row: KitRow
    made: bool | None
    measured_mm: float | None
    note: str


@dataclass(frozen=True, slots=True, kw_only=True)
class FilledSheet:
    """A whole sheet, and the profile of its kit."""

    profile: PrintProfile
    kit: str
    rows: tuple[FilledRow, ...]


def write_sheet(plan: KitPlan, folder: Path) -> Path:
    """Write ``sheet.csv``, to be filled in, and `KIT_FILE` beside it.

    Raises
    ------
    ResourceError
        If the folder cannot be written to.
    """
    text = io.StringIO(newline="")
    table = csv.writer(text)
    table.writerow(_COLUMNS)
    for row in plan.rows:
        wants = row.kind == "dimension"
        cells = [row.name, row.kind, row.axis, f"{row.nominal_mm:.6g}", "", "", ""]
        if wants or row.kind in ("blend", "peel"):
            cells[4] = "-"
        if not wants:
            cells[5] = "-"
        table.writerow(cells)
    write_json(
        folder / KIT_FILE,
        {
            "format": _FORMAT,
            "format_number": 1,
            "kit": plan.digest,
            "profile": plan.profile.as_dict(),
            "rows": [[r.name, r.kind, r.axis, r.nominal_mm] for r in plan.rows],
        },
    )
    write_text(folder / "sheet.csv", text.getvalue())
    return folder / "sheet.csv"


def _kit(path: Path) -> tuple[PrintProfile, str, dict[str, KitRow]]:
    try:
        data: Any = json.loads(path.read_text("utf-8"))
        if data["format"] != _FORMAT or data["format_number"] != 1:
            raise ValueError("another format")
        rows = {
            str(n): KitRow(
                name=str(n), kind=str(k), axis=str(a), nominal_mm=float(v), place_mm=(0.0, 0.0)
            )
            for n, k, a, v in data["rows"]
        }
        kit, profile = str(data["kit"]), data["profile"]
    except FileNotFoundError:
        raise InputError(
            f"'{path.name}' is missing beside the sheet; keep it together with the sheet that "
            "came with it.",
            file=path.name,
        ) from None
    except (OSError, ValueError, KeyError, TypeError) as error:
        raise InputError(
            f"This is not the description of a test kit: {error}.", file=path.name
        ) from None
    return PrintProfile.from_dict(profile, file=path.name), kit, rows


def _table(path: Path) -> list[tuple[int, dict[str, str]]]:
    """Line number and cells of each row; commas or semicolons between them."""
    try:
        text = path.read_text("utf-8-sig")
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(f"The sheet cannot be read: {error}.", file=path.name) from None
    first = text.splitlines()[0] if text.strip() else ""
    semicolons = first.count(";") > first.count(",")
    lines = csv.reader(io.StringIO(text), delimiter=";" if semicolons else ",")
    head = [c.strip() for c in next(lines, [])]
    if tuple(head) != _COLUMNS:
        raise InputError(
            f"The first line of a measuring sheet is {','.join(_COLUMNS)}; got {first[:120]!r}.",
            file=path.name,
        )
    found = []
    for cells in lines:
        if any(c.strip() for c in cells):
            padded = [c.strip() for c in cells] + [""] * len(_COLUMNS)
            row = dict(zip(_COLUMNS, padded, strict=False))
            if semicolons:  # a table program that writes decimal commas
                for key in ("nominal_mm", "measured_mm"):
                    row[key] = row[key].replace(",", ".")
            found.append((lines.line_num, row))
    return found


def read_sheet(path: str | Path) -> FilledSheet:
    """Read a filled sheet.

    Raises
    ------
    InputError
        If a row is unknown, missing, doubled, changed or not filled in, or if a value cannot
        be: naming the row.
    """
    path = Path(path)
    profile, kit, known = _kit(path.with_name(KIT_FILE))
    filled: dict[str, FilledRow] = {}
    empty: list[str] = []
    for line, cells in _table(path):
        name = cells["row"]
        if name not in known:
            raise InputError(
                f"Line {line} names a row '{name}' that this kit does not have. Leave the names "
                "as they are.",
                file=path.name,
                key=name,
            )
        if name in filled:
            raise InputError(f"The row '{name}' stands twice.", file=path.name, key=name)
        row = known[name]
        _unchanged(row, cells, path.name)
        made, measured = _made(row, cells, path.name), _measured(row, cells, path.name)
        if made is None and row.kind not in ("dimension", "blend", "peel"):
            empty.append(name)
        if measured is None and row.kind == "dimension":
            empty.append(name)
        filled[name] = FilledRow(row=row, made=made, measured_mm=measured, note=cells["note"])
    missing = [n for n in known if n not in filled]
    for names, said in ((missing, "are missing from the sheet"), (empty, "are not filled in")):
        if names:
            more = f" and {len(names) - _NAMED} more" if len(names) > _NAMED else ""
            raise InputError(
                f"Rows {said}: {', '.join(names[:_NAMED])}{more}. Fill in yes or no under 'made' "
                "for each feature, and a length in mm under 'measured_mm' for each dimension.",
                file=path.name,
                key=names[0],
            )
    return FilledSheet(profile=profile, kit=kit, rows=tuple(filled[n] for n in known))


def _unchanged(row: KitRow, cells: Mapping[str, str], file: str) -> None:
    try:
        same = math.isclose(float(cells["nominal_mm"]), row.nominal_mm, rel_tol=1e-4, abs_tol=1e-9)
    except ValueError:
        same = False
    if not same or (cells["kind"], cells["axis"]) != (row.kind, row.axis):
        raise InputError(
            f"Row '{row.name}' was changed: its kind, axis and nominal size are {row.kind}, "
            f"'{row.axis}', {row.nominal_mm:g} mm.",
            file=file,
            key=row.name,
        )


def _made(row: KitRow, cells: Mapping[str, str], file: str) -> bool | None:
    text = cells["made"].lower()
    if text in ("", "-"):
        return None
    if text in _YES or text in _NO:
        return text in _YES
    raise InputError(
        f"Write yes or no under 'made' of '{row.name}'; got {cells['made']!r}.",
        file=file,
        key=row.name,
    )


def _measured(row: KitRow, cells: Mapping[str, str], file: str) -> float | None:
    text = cells["measured_mm"]
    if text in ("", "-"):
        return None
    try:
        value = float(text)
    except ValueError:
        raise InputError(
            f"The length measured of '{row.name}' is a number in mm, with a decimal point and "
            f"without a unit; got {text!r}.",
            file=file,
            key=row.name,
        ) from None
    if row.kind != "dimension":
        if not (math.isfinite(value) and value >= 0):
            raise InputError(f"'{row.name}' cannot measure {text} mm.", file=file, key=row.name)
        return value
    wanted = row.nominal_mm
    if math.isfinite(value) and abs(value - wanted) <= max(_SLIP * wanted, 0.5):
        return value
    hint = ""
    for unit, factor in (("micrometres", 1000.0), ("inches", 1 / 25.4), ("centimetres", 0.1)):
        if abs(value / factor - wanted) <= _SLIP * wanted:
            hint = f" It looks like {unit}."
    raise InputError(
        f"'{row.name}' cannot measure {text} mm: it is {wanted:g} mm long in the design.{hint} "
        "Lengths are in mm.",
        file=file,
        key=row.name,
    )

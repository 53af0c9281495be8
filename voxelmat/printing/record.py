"""What happened at the printer: one line of JSON a print, appended beside the stack, chained."""

from __future__ import annotations

import dataclasses
import hashlib
import json
import math
import os
import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import datetime
from pathlib import Path
from typing import Any

from voxelmat.errors import FileFormatError, InputError
from voxelmat.io.atomic import explain_os_error
from voxelmat.model.finding import Finding
from voxelmat.model.material import Material
from voxelmat.printing.journal import locked
from voxelmat.printing.mass import mass_band
from voxelmat.printing.readback import Stack
from voxelmat.provenance import utc_now

__all__ = ["Measured", "PrintRecord", "append_record", "read_records", "record_path"]

_FORMAT = "voxelmat-print-record"
_OPERATOR = re.compile(r"^[^\s][^\n\r\t]{0,23}$")


@dataclass(frozen=True, slots=True, kw_only=True)
class Measured:
    """One dimension: its name, what it should be and what it is, mm."""

    name: str
    nominal_mm: float
    measured_mm: float


@dataclass(frozen=True, slots=True, kw_only=True)
class PrintRecord:
    """One print, or one attempt.

    Attributes
    ----------
    operator : str
        A role or initials, at most 24 characters.
    started : str
        ISO 8601.
    lots : mapping
        Resin to lot.
    abort_layer : int or None
        Whole layers that were printed when it was stopped; None for a print that went through.
    mass_g : float or None
        As weighed.
    with_support : bool
        Weighed before cleaning.
    measured : tuple of Measured
    note : str

    Raises
    ------
    InputError
        If a value cannot be, naming its key.
    """

    operator: str
    started: str
    lots: Mapping[str, str] = field(default_factory=dict)
    abort_layer: int | None = None
    mass_g: float | None = None
    with_support: bool = False
    measured: tuple[Measured, ...] = ()
    note: str = ""

    def __post_init__(self) -> None:
        object.__setattr__(self, "lots", dict(self.lots))
        if not _OPERATOR.match(self.operator):
            raise InputError(
                f"Give a role or initials of at most 24 characters; got {self.operator!r}.",
                key="operator",
            )
        try:
            datetime.fromisoformat(self.started)
        except (ValueError, TypeError):
            raise InputError(
                f"Give the start as 2026-12-01T08:30; got {self.started!r}.", key="started"
            ) from None
        sizes = [m.measured_mm for m in self.measured] + [m.nominal_mm for m in self.measured]
        if self.mass_g is not None and not (math.isfinite(self.mass_g) and self.mass_g > 0):
            raise InputError(f"A weighed mass is above 0 g; got {self.mass_g}.", key="mass_g")
        if not all(math.isfinite(v) and v > 0 for v in sizes):
            raise InputError("Dimensions are lengths above 0 mm.", key="measured")


def record_path(stack: Stack) -> Path:
    """The file beside the folder of the stack; the stack itself is never touched."""
    folder = stack.folder.absolute()
    return folder.with_name(f"{folder.name}.record.jsonl")


def _judged(
    stack: Stack, record: PrintRecord, materials: Mapping[str, Material] | None
) -> list[Finding]:
    found = [
        Finding(
            severity="note",
            code="no lot",
            message=f"No lot is noted for '{resin}'.",
            remedy="Note it, so that a bad lot can be traced.",
        )
        for resin in dict.fromkeys(c.resin for c in stack.channels)
        if resin not in record.lots
    ]
    if record.mass_g is not None:
        band = mass_band(
            stack,
            with_support=record.with_support,
            layers=record.abort_layer,
            materials=materials,
        )
        if not band.low_g <= record.mass_g <= band.high_g:
            side = "less" if record.mass_g < band.low_g else "more"
            found.append(
                Finding(
                    severity="warn",
                    code="mass",
                    message=f"The print weighs {record.mass_g:.4g} g, {side} than the "
                    f"{band.low_g:.4g} to {band.high_g:.4g} g that it should ({band.basis}).",
                    remedy="Look for missed droplets, a wrong resin or support left inside."
                    if side == "less"
                    else "Look for support or uncured resin left inside, or a wrong resin.",
                    value=record.mass_g,
                    limit=band.low_g if side == "less" else band.high_g,
                    unit="g",
                )
            )
    return found


def append_record(
    stack: Stack, record: PrintRecord, *, materials: Mapping[str, Material] | None = None
) -> list[Finding]:
    """Append a record; what is in the file already is never changed.

    Each line holds the SHA-256 of the line before it, so that a changed or missing line shows.

    Parameters
    ----------
    stack : Stack
    record : PrintRecord
    materials : mapping, optional
        For the range of the densities; see `voxelmat.printing.mass.mass_band`.

    Returns
    -------
    list of Finding
        A mass outside its band, resins without a lot. They are in the line too.

    Raises
    ------
    InputError
        If a lot names a resin, or the abort a layer, that the stack does not have.
    ResourceError
        If the file cannot be written; it is then as it was, or another is writing to it.
    """
    resins = list(dict.fromkeys(c.resin for c in stack.channels))
    for resin in record.lots:
        if resin not in resins:
            raise InputError(
                f"The stack lays no '{resin}'; it lays {', '.join(resins)}.", key="lots"
            )
    if record.abort_layer is not None and not 0 <= record.abort_layer < stack.n_layers:
        raise InputError(
            f"The stack has {stack.n_layers} layers; it cannot have been stopped after "
            f"{record.abort_layer}.",
            key="abort_layer",
        )
    findings = _judged(stack, record, materials)
    path = record_path(stack)
    with locked(path):
        try:
            before = path.read_bytes() if path.exists() else b""
            lines = before.splitlines()
            entry = {
                "format": _FORMAT,
                "job": stack.manifest["job"],
                "recorded_utc": utc_now(),
                "record": dataclasses.asdict(record),
                "findings": [
                    {"severity": f.severity, "code": f.code, "message": f.message} for f in findings
                ],
                "line_before_sha256": hashlib.sha256(lines[-1]).hexdigest() if lines else "",
            }
            text = json.dumps(entry, ensure_ascii=False, allow_nan=False)
            torn = bool(before) and not before.endswith(b"\n")
            _append(path, ("\n" if torn else "") + text + "\n", len(before))
        except OSError as error:
            raise explain_os_error(path, error) from error
    return findings


def _append(path: Path, text: str, size: int) -> None:
    """All of `text` at the end of the file, down to the disk, or nothing."""
    handle = os.open(path, os.O_WRONLY | os.O_CREAT | os.O_APPEND, 0o644)
    data = text.encode()
    try:
        try:
            done = 0
            while done < len(data):
                done += os.write(handle, data[done:])
            os.fsync(handle)
        except OSError:
            os.ftruncate(handle, size)
            raise
    finally:
        os.close(handle)


def read_records(stack: Stack) -> tuple[list[dict[str, Any]], list[str]]:
    """All records of a stack, and what is wrong with the file.

    Returns
    -------
    list of dict
        The lines that can be read, oldest first: ``record``, ``findings``, ``recorded_utc``,
        ``job``.
    list of str
        Lines that cannot be read, or that do not follow on the one before.

    Raises
    ------
    FileFormatError
        If the file cannot be read at all.
    """
    path = record_path(stack)
    if not path.exists():
        return [], []
    try:
        lines = path.read_bytes().splitlines()
    except OSError as error:
        raise FileFormatError(f"{path.name} cannot be read: {error}.") from None
    found, faults = [], []
    before = ""
    for number, line in enumerate(lines, 1):
        try:
            entry = json.loads(line)
            if entry["format"] != _FORMAT or not isinstance(entry["record"], dict):
                raise ValueError("not a print record")
            if entry["line_before_sha256"] != before:
                faults.append(f"line {number} does not follow on the line before it")
            found.append(entry)
        except (ValueError, LookupError, TypeError) as error:
            faults.append(f"line {number} cannot be read: {error}")
        before = hashlib.sha256(line).hexdigest()
    return found, faults

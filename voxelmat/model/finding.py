"""What a check found: how bad, where, and what to do."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

__all__ = ["SEVERITIES", "Finding"]

Severity = Literal["stop", "warn", "note"]
#: From worst to mildest: do not print; look before printing; good to know.
SEVERITIES: tuple[Severity, ...] = ("stop", "warn", "note")


@dataclass(frozen=True, slots=True, kw_only=True)
class Finding:
    """One finding of a check.

    Attributes
    ----------
    severity : {"stop", "warn", "note"}
    code : str
        Short fixed name of the check, for filters: ``"two materials"``.
    message : str
        What was found, with numbers and units.
    place_mm : tuple of float or None
        Where, in the coordinates of the part.
    remedy : str
        What to do.
    value, limit : float or None
    unit : str
    part : str
        Which part of a tray; empty where there is one part, or where no part is meant.
    fix : str
        Name of the repair that may be safe (`voxelmat.printing.fixes`); empty where none is.
    """

    severity: Severity
    code: str
    message: str
    place_mm: tuple[float, float, float] | None = None
    remedy: str = ""
    value: float | None = None
    limit: float | None = None
    unit: str = ""
    part: str = ""
    fix: str = ""

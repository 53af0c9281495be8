"""Units inside are mm, N, MPa, tonne, s, degC; this turns others into them and prints numbers."""

from __future__ import annotations

import difflib
import math

from voxelmat.errors import InputError

__all__ = [
    "DENSITY_G_CM3",
    "LENGTH_MM",
    "PRESSURE_MPA",
    "length_factor",
    "number",
    "pressure_factor",
    "quantity",
]

#: mm in one unit of length.
LENGTH_MM = {"mm": 1.0, "cm": 10.0, "m": 1000.0, "um": 1e-3, "inch": 25.4, "foot": 304.8}
#: MPa in one unit of pressure. psi: 1 lbf / in^2 = 4.4482216152605 N / 645.16 mm^2 (NIST SP 811).
PRESSURE_MPA = {
    "Pa": 1e-6,
    "kPa": 1e-3,
    "MPa": 1.0,
    "bar": 0.1,
    "psi": 4.4482216152605 / 645.16,
    "N/cm2": 0.01,
}
#: tonne/mm^3 in 1 g/cm^3.
DENSITY_G_CM3 = 1e-9


def _factor(table: dict[str, float], unit: str, what: str) -> float:
    if unit in table:
        return table[unit]
    near = difflib.get_close_matches(unit, table, n=1)
    hint = f" Did you mean '{near[0]}'?" if near else ""
    raise InputError(f"'{unit}' is not a unit of {what}; use one of {', '.join(table)}.{hint}")


def length_factor(unit: str) -> float:
    """Millimetres in one `unit`; raises `InputError` for a unit that is not known."""
    return _factor(LENGTH_MM, unit, "length")


def pressure_factor(unit: str) -> float:
    """Megapascals in one `unit`; raises `InputError` for a unit that is not known."""
    return _factor(PRESSURE_MPA, unit, "pressure")


def number(value: float, digits: int = 3) -> str:
    """Format with `digits` significant digits, as people write numbers.

    Examples
    --------
    >>> number(0.012345), number(12345.6), number(1234567.0), number(0.0)
    ('0.0123', '12300', '1.23e+06', '0')
    """
    if not math.isfinite(value):
        return str(value)
    if value == 0:
        return "0"
    exponent = math.floor(math.log10(abs(value)))
    if -4 <= exponent < 6:
        rounded = round(value, digits - 1 - exponent)
        return f"{rounded:.{max(0, digits - 1 - exponent)}f}"
    return f"{value:.{digits - 1}e}"


def quantity(value: float, unit: str, digits: int = 3) -> str:
    """A number with its unit, `digits` significant digits.

    Examples
    --------
    >>> quantity(0.45678, "mm")
    '0.457 mm'
    """
    return f"{number(value, digits)} {unit}".rstrip()

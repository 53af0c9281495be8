"""Dimensions to be measured on a stack, and the sheet of what was measured."""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Literal

from voxelmat.errors import InputError
from voxelmat.units import number, quantity

__all__ = ["KINDS", "Dimension", "InspectionSheet", "Measurement"]

Triple = tuple[float, float, float]
State = Literal["in tolerance", "out of tolerance", "cannot be said"]

#: What can be measured, and its unit.
KINDS = {
    "outside": "mm",  # between the outermost crossings of a line
    "wall": "mm",  # the solid run of a line that holds the point
    "gap": "mm",  # the empty run of a line that holds the point, solid at both ends
    "hole": "mm",  # diameter of the circle fitted to an empty section
    "pin": "mm",  # the same of a solid section
    "area": "mm^2",  # solid in a section
    "volume": "mm^3",  # solid, or one resin, in a box
    "surface": "mm",  # deviation of a protected surface; made by `measure`, not given
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Dimension:
    """One dimension of a design.

    Attributes
    ----------
    name : str
    kind : str
        One of `KINDS`, save "surface".
    nominal : float
        In the unit of the kind.
    lower, upper : float
        Tolerances as deviations from the nominal: -0.1 and 0.1.
    point_mm : tuple of float
        On the line, on the axis, or in the section; part coordinates. A volume needs none.
    direction : tuple of float
        Along the line, along the axis, or across the section; a section lies across x, y or z.
    low_mm, high_mm : tuple of float or None
        Box that an area or a volume is taken in; without it all of the part.
    resin : str
        A volume of this resin alone.

    Raises
    ------
    InputError
        For a kind that is not known, or figures that cannot be.
    """

    name: str
    kind: str
    nominal: float
    lower: float
    upper: float
    point_mm: Triple = (0.0, 0.0, 0.0)
    direction: Triple = (1.0, 0.0, 0.0)
    low_mm: Triple | None = None
    high_mm: Triple | None = None
    resin: str = ""

    def __post_init__(self) -> None:
        if self.kind not in KINDS:
            raise InputError(
                f"Dimension '{self.name}' is of kind {self.kind!r}; use one of {', '.join(KINDS)}.",
                key="kind",
            )
        figures = (self.nominal, self.lower, self.upper, *self.point_mm, *self.direction)
        if not all(math.isfinite(v) for v in figures) or self.nominal < 0:
            raise InputError(
                f"Dimension '{self.name}' takes finite figures and a nominal of 0 or more.",
                key="nominal",
            )
        if self.lower > self.upper:
            raise InputError(
                f"Dimension '{self.name}' has tolerances from {self.lower:g} to {self.upper:g}; "
                "the lower one comes first.",
                key="lower",
            )
        if not any(self.direction):
            raise InputError(f"Dimension '{self.name}' has no direction.", key="direction")
        if (self.low_mm is None) != (self.high_mm is None) or (
            self.low_mm is not None
            and self.high_mm is not None
            and any(a >= b for a, b in zip(self.low_mm, self.high_mm, strict=True))
        ):
            raise InputError(
                f"Dimension '{self.name}': a box has a low and a high corner, in this order.",
                key="low_mm",
            )

    @property
    def unit(self) -> str:
        """Of nominal, tolerances and measured value."""
        return KINDS[self.kind]


@dataclass(frozen=True, slots=True, kw_only=True)
class Measurement:
    """What was measured.

    Attributes
    ----------
    dimension : Dimension
    measured : float or None
        None where it cannot be measured; `note` says why.
    uncertainty : float
        Expanded, coverage factor 2, from the rounding of every crossing to whole sites
        (rectangular distribution of half width pitch / 2: JCGM 100:2008, 4.3.7).
    note : str
    """

    dimension: Dimension
    measured: float | None
    uncertainty: float = 0.0
    note: str = ""

    @property
    def deviation(self) -> float | None:
        """Measured less nominal."""
        return None if self.measured is None else self.measured - self.dimension.nominal

    @property
    def state(self) -> State:
        """Judged with the uncertainty as a guard on both sides of each limit."""
        off = self.deviation
        if off is None:
            return "cannot be said"
        low, high = self.dimension.lower, self.dimension.upper
        if low + self.uncertainty <= off <= high - self.uncertainty:
            return "in tolerance"
        if off < low - self.uncertainty or off > high + self.uncertainty:
            return "out of tolerance"
        return "cannot be said"


@dataclass(frozen=True, slots=True, kw_only=True)
class InspectionSheet:
    """Dimensions of a design as they stand in a stack.

    Attributes
    ----------
    title : str
    rows : tuple of Measurement
    """

    title: str
    rows: tuple[Measurement, ...]

    #: Heads of the columns of `cells`.
    HEAD = (
        "dimension", "kind", "nominal", "tolerance", "measured", "deviation", "±", "unit", "judged",
    )  # fmt: skip

    def __iter__(self) -> Iterator[Measurement]:
        return iter(self.rows)

    def __getitem__(self, name: str) -> Measurement:
        for row in self.rows:
            if row.dimension.name == name:
                return row
        raise InputError(f"The sheet has no dimension '{name}'.")

    def cells(self) -> list[list[str]]:
        """A table as text, one row a dimension."""
        found = []
        for row in self.rows:
            d = row.dimension
            measured = "-" if row.measured is None else number(row.measured, 4)
            off = "-" if row.deviation is None else f"{row.deviation:+.3g}"
            found.append(
                [
                    d.name,
                    d.kind,
                    number(d.nominal, 4),
                    f"{d.lower:+.3g} / {d.upper:+.3g}",
                    measured,
                    off,
                    number(row.uncertainty, 2),
                    d.unit,
                    f"{row.state}{': ' + row.note if row.note else ''}",
                ]
            )
        return found

    def text(self) -> str:
        """A table for a terminal."""
        lines = [list(self.HEAD), *self.cells()]
        width = [max(len(line[c]) for line in lines) for c in range(len(self.HEAD))]
        return "\n".join(
            [self.title]
            + [
                "  ".join(
                    cell.ljust(w) if c in (0, 1, 7, 8) else cell.rjust(w)
                    for c, (cell, w) in enumerate(zip(line, width, strict=True))
                ).rstrip()
                for line in lines
            ]
        )

    def csv(self) -> str:
        """Comma-separated values with every digit, one row a dimension."""
        out = io.StringIO()
        write = csv.writer(out, lineterminator="\n")
        write.writerow(
            ("dimension", "kind", "unit", "nominal", "lower", "upper", "measured", "deviation",
             "uncertainty_k2", "state", "note")
        )  # fmt: skip
        for row in self.rows:
            d = row.dimension
            write.writerow(
                (d.name, d.kind, d.unit, d.nominal, d.lower, d.upper,
                 "" if row.measured is None else row.measured,
                 "" if row.deviation is None else row.deviation,
                 row.uncertainty, row.state, row.note)
            )  # fmt: skip
        return out.getvalue()

    def html(self) -> str:
        """A table as HTML."""
        from voxelmat.model.html import table

        return table(list(self.HEAD), self.cells(), self.title)

    def _repr_html_(self) -> str:
        return self.html()

    def __repr__(self) -> str:
        count = dict.fromkeys(("in tolerance", "out of tolerance", "cannot be said"), 0)
        for row in self.rows:
            count[row.state] += 1
        words = ", ".join(f"{n} {s}" for s, n in count.items() if n)
        return f"InspectionSheet({self.title!r}, {words or 'empty'})"

    def worst(self) -> str:
        """The row that lies farthest out, in words; empty where all are in tolerance."""
        out = [r for r in self.rows if r.state == "out of tolerance"]
        if not out:
            return ""
        row = max(out, key=lambda r: abs(r.deviation or 0.0))
        d = row.dimension
        return (
            f"{d.name}: {quantity(row.measured or 0.0, d.unit)} for {quantity(d.nominal, d.unit)}"
        )

"""One load case: supports and loads on regions, with how long, how warm and how often."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.freestrain import InitialStrain, Temperature
from voxelmat.model.plate import Plate
from voxelmat.model.region import Region, parse_side

__all__ = [
    "BodyForce",
    "Force",
    "Foundation",
    "GroundSpring",
    "InitialStrain",
    "Load",
    "LoadCase",
    "Plate",
    "Pressure",
    "PressureMap",
    "Support",
    "Temperature",
]

Vector = tuple[float, float, float]


def _finite(values: tuple[float, ...], what: str) -> None:
    if not all(math.isfinite(v) for v in values):
        raise InputError(f"{what} must be finite; got {values}.")


@dataclass(frozen=True, slots=True, kw_only=True)
class Support:
    """Nodes of a region whose displacement is given.

    Attributes
    ----------
    region : Region
    displacement : tuple of (float or None)
        Along x, y, z in mm; None leaves that direction free. ``(0, 0, 0)`` is fixed,
        ``(None, None, 0)`` slides in x and y, other numbers are prescribed.
    rotation : tuple of float
        Small rotation vector, radians, added to the displacement in the directions held: nodes
        at r move by ``displacement + rotation x (r - about)``.
    about : tuple of float
        The point that the rotation turns about, mm; the reaction moment counts about it.
    """

    region: Region
    displacement: tuple[float | None, float | None, float | None] = (0.0, 0.0, 0.0)
    rotation: Vector = (0.0, 0.0, 0.0)
    about: Vector = (0.0, 0.0, 0.0)

    def __post_init__(self) -> None:
        given = tuple(d for d in self.displacement if d is not None)
        if not given:
            raise InputError(f"The support on '{self.region.name}' holds no direction at all.")
        _finite(given, f"The displacement of the support on '{self.region.name}' (mm)")
        _finite(
            (*self.rotation, *self.about),
            f"The rotation (rad) and its centre (mm) of the support on '{self.region.name}'",
        )

    @property
    def moves(self) -> bool:
        """Whether it prescribes a motion other than 0."""
        return any(d not in (None, 0.0) for d in self.displacement) or any(self.rotation)


@dataclass(frozen=True, slots=True, kw_only=True)
class Force:
    """A total force spread over the surface of a region, N."""

    region: Region
    vector: Vector

    def __post_init__(self) -> None:
        _finite(self.vector, f"The force on '{self.region.name}' (N)")


@dataclass(frozen=True, slots=True, kw_only=True)
class Pressure:
    """A uniform pressure on the exposed surface of a region, MPa; positive pushes inwards."""

    region: Region
    pressure: float

    def __post_init__(self) -> None:
        _finite((self.pressure,), f"The pressure on '{self.region.name}' (MPa)")


@dataclass(frozen=True, slots=True, kw_only=True)
class PressureMap:
    """Measured pressures laid on the part along an axis.

    Attributes
    ----------
    region : Region
        Only surface in this region is loaded; give a large one for all that the map covers.
    values : ndarray of float64, shape (rows, columns)
        MPa, not negative, row 0 first as in the file.
    cell : tuple of float
        Cell width (along a row) and height (from row to row), mm.
    side : str
        Where the mat lies: ``"z+"`` presses down from above.
    first_cell : tuple of float
        Centre of cell (row 0, column 0), in the two axes other than `side`'s, in order, mm.
    column_direction, row_direction : str
        Axis and sense in which the column number and the row number grow: ``"x+"``, ``"y-"``.
    acts : str
        ``"normal"``: along the inward normal of the surface; ``"along"``: along the side's axis.
    expected_force : float or None
        What the resultant along the side's axis should be, N.
    source_file : str
    """

    region: Region
    values: NDArray[np.float64]
    cell: tuple[float, float]
    side: str
    first_cell: tuple[float, float]
    column_direction: str
    row_direction: str
    acts: Literal["normal", "along"] = "normal"
    expected_force: float | None = None
    source_file: str = ""

    def __post_init__(self) -> None:
        name = self.region.name
        values = np.array(self.values, dtype=np.float64)
        if values.ndim != 2 or values.size == 0:
            raise InputError(f"The pressure map on '{name}' is not a table; shape {values.shape}.")
        bad = np.argwhere(~np.isfinite(values))
        if len(bad):
            raise InputError(
                f"The pressure map on '{name}' holds {len(bad)} cells that are no number, the "
                f"first at row {bad[0][0] + 1}, column {bad[0][1] + 1}."
            )
        low = np.argwhere(values < 0)
        if len(low):
            raise InputError(
                f"The pressure map on '{name}' has negative pressure at row {low[0][0] + 1}, "
                f"column {low[0][1] + 1}."
            )
        values.flags.writeable = False
        object.__setattr__(self, "values", values)
        if not all(math.isfinite(c) and c > 0 for c in self.cell):
            raise InputError(f"The pressure map on '{name}': cells must be above 0 mm.")
        axis, _ = parse_side(self.side, name)
        column, _ = parse_side(self.column_direction, name)
        row, _ = parse_side(self.row_direction, name)
        if len({axis, column, row}) != 3:
            raise InputError(
                f"The pressure map on '{name}': rows, columns and the side must lie along three "
                f"different axes; got row {self.row_direction}, column {self.column_direction}, "
                f"side {self.side}."
            )

    @property
    def resultant(self) -> float:
        """Force of the whole map along the side's axis, N."""
        return float(self.values.sum() * self.cell[0] * self.cell[1])

    def cell_of(self, points: NDArray[np.float64]) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
        """Row and column under each point (n, 3) in mm; they may lie outside the table."""
        axis, _ = parse_side(self.side, self.region.name)
        first = dict(zip([a for a in range(3) if a != axis], self.first_cell, strict=True))
        index = []
        for direction, step in (
            (self.row_direction, self.cell[1]),
            (self.column_direction, self.cell[0]),
        ):
            a, sense = parse_side(direction, self.region.name)
            index.append(np.floor(sense * (points[:, a] - first[a]) / step + 0.5).astype(np.intp))
        return index[0], index[1]

    def at(self, points: NDArray[np.float64]) -> NDArray[np.float64]:
        """Pressure over each point (n, 3), MPa; 0 outside the map."""
        row, column = self.cell_of(points)
        rows, columns = self.values.shape
        inside = (row >= 0) & (row < rows) & (column >= 0) & (column < columns)
        return np.where(
            inside, self.values[np.where(inside, row, 0), np.where(inside, column, 0)], 0.0
        )

    @property
    def centre(self) -> tuple[float, float]:
        """Centre of pressure in the two axes other than the side's, in order, mm."""
        total = self.values.sum()
        if not total > 0:
            raise InputError(f"The pressure map on '{self.region.name}' is zero everywhere.")
        rows, columns = np.indices(self.values.shape)
        axis, _ = parse_side(self.side, self.region.name)
        first = dict(zip([a for a in range(3) if a != axis], self.first_cell, strict=True))
        for direction, step, count in (
            (self.row_direction, self.cell[1], rows),
            (self.column_direction, self.cell[0], columns),
        ):
            a, sense = parse_side(direction, self.region.name)
            first[a] += float(sense * step * (self.values * count).sum() / total)
        u, v = (first[a] for a in sorted(first))
        return u, v


@dataclass(frozen=True, slots=True, kw_only=True)
class BodyForce:
    """A force in proportion to mass: an acceleration in mm/s^2 (gravity: 9806.65)."""

    acceleration: Vector
    region: Region | None = None

    def __post_init__(self) -> None:
        _finite(self.acceleration, "A body force's acceleration (mm/s^2)")


@dataclass(frozen=True, slots=True, kw_only=True)
class GroundSpring:
    """Springs from a region to the ground: total stiffness along x, y, z, N/mm (>= 0)."""

    region: Region
    stiffness: Vector

    def __post_init__(self) -> None:
        _finite(self.stiffness, f"The spring on '{self.region.name}' (N/mm)")
        if min(self.stiffness) < 0 or max(self.stiffness) == 0:
            raise InputError(
                f"The spring on '{self.region.name}' needs stiffness >= 0 N/mm, one above 0; "
                f"got {self.stiffness}."
            )


@dataclass(frozen=True, slots=True, kw_only=True)
class Foundation:
    """An elastic bed under the surface of a region: what it pushes back with, a depth and an area.

    Each point of the surface stands on a spring of its own, along the surface's normal or in all
    directions, by the true area of the surface, not that of its steps (E. Winkler 1867, from
    memory). It pulls as well as it pushes: it is no contact.

    Attributes
    ----------
    region : Region
    stiffness : float
        N/mm of force by mm^2 of surface: N/mm^3 (> 0).
    acts : str
        ``"normal"``: along the true normal, sliding freely; ``"all"``: the same in any direction.
    """

    region: Region
    stiffness: float
    acts: Literal["normal", "all"] = "normal"

    def __post_init__(self) -> None:
        name = f"The foundation under '{self.region.name}'"
        if not (math.isfinite(self.stiffness) and self.stiffness > 0):
            raise InputError(f"{name} needs a stiffness above 0 N/mm^3; got {self.stiffness}.")
        if self.acts not in ("normal", "all"):
            raise InputError(f"{name} acts 'normal' or 'all'; got {self.acts!r}.")


Load = (
    Force
    | Pressure
    | PressureMap
    | BodyForce
    | GroundSpring
    | Foundation
    | Temperature
    | InitialStrain
)


@dataclass(frozen=True, slots=True, kw_only=True)
class LoadCase:
    """Supports and loads that act together.

    Attributes
    ----------
    name : str
    supports : tuple of Support
    loads : tuple of Load
    plates : tuple of Plate
        Regions that move as one body each.
    duration_s, temperature_degC, cycles : float, float, int
        Compared with the conditions of each material's record.
    weight : float
        Share in a weighted objective.
    """

    name: str
    supports: tuple[Support, ...] = ()
    loads: tuple[Load, ...] = field(default_factory=tuple)
    duration_s: float = 1.0
    temperature_degC: float = 23.0
    cycles: int = 1
    weight: float = 1.0
    plates: tuple[Plate, ...] = ()

    def __post_init__(self) -> None:
        names = [p.name for p in self.plates]
        if len(set(names)) != len(names):
            raise InputError(f"Load case '{self.name}': plates need different names; got {names}.")
        _finite((self.duration_s, self.temperature_degC, self.weight), f"Load case '{self.name}'")
        if self.duration_s <= 0 or self.cycles < 1 or self.weight <= 0:
            raise InputError(
                f"Load case '{self.name}' needs duration > 0 s, cycles >= 1 and weight > 0; got "
                f"{self.duration_s} s, {self.cycles}, {self.weight}."
            )

    @property
    def strains(self) -> bool:
        """Whether something in it would strain the part without any force."""
        return any(isinstance(load, Temperature | InitialStrain) for load in self.loads)

    @property
    def temperature_ends(self) -> tuple[float, float]:
        """Lowest and highest temperature that it names, fields of temperature included, degC."""
        found = [self.temperature_degC]
        for load in self.loads:
            if isinstance(load, Temperature):
                field = np.asarray(load.temperature)
                found += [float(np.nanmin(field)), float(np.nanmax(field))]
        return min(found), max(found)

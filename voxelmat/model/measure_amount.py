"""How much there is of something: volume, mass, cost, a resin, where its centre is, its surface."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.measure import mask

__all__ = [
    "CentreOfMass",
    "Cost",
    "InterfaceArea",
    "Mass",
    "Perimeter",
    "ResinVolume",
    "Volume",
]

Bools = NDArray[np.bool_]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Regional:
    """A measure of designed voxels, in a region or everywhere."""

    region: Bools | None = None

    def __post_init__(self) -> None:
        if self.region is not None:
            object.__setattr__(self, "region", mask(self.region, "The region of a measure"))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Volume(_Regional):
    """Solid volume over that of the shape (or of the region of it); kept voxels not counted.

    Attributes
    ----------
    region : ndarray of bool or None
        Voxels, ``[i, j, k]``; all where left out.
    """


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Mass(_Regional):
    """Mass of the designed voxels, tonne.

    Attributes
    ----------
    region : ndarray of bool or None
    with_kept : bool
        Whether voxels that are kept as they are count too.
    """

    with_kept: bool = False


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Cost(_Regional):
    """Cost of the resins in the designed voxels, in the currency of the material records."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ResinVolume(_Regional):
    """Volume of one resin over that of the shape (or of the region of it), kept not counted."""

    resin: str


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class CentreOfMass(_Regional):
    """Coordinate of the centre of mass along an axis, mm; kept voxels count.

    Attributes
    ----------
    region : ndarray of bool or None
    axis : str
        ``"x"``, ``"y"`` or ``"z"``.
    """

    axis: Literal["x", "y", "z"]

    def __post_init__(self) -> None:
        _Regional.__post_init__(self)
        if self.axis not in ("x", "y", "z"):
            raise InputError(f"A centre of mass has an axis x, y or z; got {self.axis!r}.")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Perimeter(_Regional):
    """Area of the surface that the design adds inside the shape, mm^2.

    The total variation of the density, which of a sharp or an evenly blurred surface is its
    area, whichever way it looks. The shape's own outside is not counted.
    """


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class InterfaceArea(_Regional):
    """Area between different resins, mm^2: half the total variation of all fractions."""

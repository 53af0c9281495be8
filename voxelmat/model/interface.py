"""Bonds between resins: how strong one is, and what a load does to every face of them.

Two materials meet at a face between two solid voxels where their *dominant* resins differ and
their blends differ by at least `STEP` of the volume. The step is half the sum of the differences
of all volume fractions: 1 between pure resins, 0.1 between neighbours of a gradient in ten steps.
Gradients are no interface: there the droplets of both resins interlock on both sides.
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.material import Constant
from voxelmat.model.part import Part

__all__ = ["STEP", "Bond", "InterfaceResult", "InterfaceSpot", "dominant_resins", "find_bond"]

#: Least share of the volume by which two blends differ at an interface. Ours: where less changes,
#: the resin that dominates one side makes up a good part of the other too.
STEP = 0.5

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class Bond:
    """Strength of the interface between two resins printed side by side.

    Attributes
    ----------
    first, second : str
        The resins, in any order.
    tensile : Constant
        Normal stress that pulls them apart, MPa (> 0), from a butt joint or a peel test.
    shear : Constant
        Shear stress at which they slide apart, MPa (> 0).
    notes : str
    """

    first: str
    second: str
    tensile: Constant
    shear: Constant
    notes: str = ""

    def __post_init__(self) -> None:
        if self.first == self.second:
            raise InputError(f"A bond joins two resins; got '{self.first}' twice.", key="second")
        for label, constant in (("tensile", self.tensile), ("shear", self.shear)):
            if not constant.band[0] > 0:
                raise InputError(
                    f"Bond {self.first} + {self.second}: the {label} strength must be above 0 MPa "
                    f"over its whole range; got {constant.band[0]} to {constant.band[1]} MPa."
                )

    @property
    def pair(self) -> frozenset[str]:
        """Both resins."""
        return frozenset((self.first, self.second))

    @property
    def indicative(self) -> bool:
        """True where no source stands behind one of the strengths."""
        return self.tensile.indicative or self.shear.indicative

    def utilisation(self, normal: Floats, shear: Floats, side: str = "value") -> Floats:
        """Share of the strength that tractions use: ``sqrt((t / T)^2 + (s / S)^2)``.

        Parameters
        ----------
        normal, shear : ndarray
            MPa. Compression (normal below 0) counts as 0.
        side : str
            ``"value"``, ``"low"`` or ``"high"``: which end of the strengths' ranges.
        """
        if side == "value":
            tensile, slide = self.tensile.value, self.shear.value
        else:
            end = {"low": 0, "high": 1}[side]
            tensile, slide = self.tensile.band[end], self.shear.band[end]
        return np.hypot(np.maximum(normal, 0.0) / tensile, shear / slide)


def find_bond(bonds: Iterable[Bond], a: str, b: str) -> Bond | None:
    """The record of two resins, in either order, or None where there is none."""
    return next((bond for bond in bonds if bond.pair == {a, b}), None)


def dominant_resins(part: Part) -> NDArray[np.int16]:
    """For each palette entry the column of its largest fraction; -1 for empty space.

    Of equal fractions the resin that comes first in `Part.resins` counts.
    """
    table = part.palette_fractions()
    out = table.argmax(axis=1).astype(np.int16) if table.shape[1] else np.zeros(len(table), "i2")
    out[table.sum(axis=1) <= 0] = -1
    return out


@dataclass(frozen=True, slots=True, kw_only=True)
class InterfaceSpot:
    """One cluster of loaded faces between two resins, by its worst face.

    Attributes
    ----------
    resins : tuple of str
        The pair, in ascending order.
    place_mm : tuple of float
        Centre of the worst face.
    normal : float
        MPa; positive pulls the resins apart.
    shear : float
        MPa, its size.
    utilisation : float
        Share of the strength used; nan where no record of the pair is known.
    utilisation_low, utilisation_high : float
        The same with the upper and the lower end of the strengths.
    jump : float
        MPa: half the difference of the tractions that the stresses in the two voxels give. Large
        against `normal` and `shear` where the grid is too coarse to say.
    stepped : bool
        The steps of the voxels lie there: the value of a single face may be off by half, however
        fine the grid; the mean over the cluster is better.
    mean_utilisation : float
        Over the cluster, weighted by area; nan without a record.
    at_edge : bool
        The interface ends there in the open, or a load or a support acts there: the value may
        grow with every refinement of the grid.
    indicative : bool
        The strengths have no source.
    area_mm2 : float
        Of the cluster.
    """

    resins: tuple[str, str]
    place_mm: tuple[float, float, float]
    normal: float
    shear: float
    utilisation: float
    utilisation_low: float
    utilisation_high: float
    jump: float
    stepped: bool
    mean_utilisation: float
    at_edge: bool
    indicative: bool
    area_mm2: float

    @property
    def safety_factor(self) -> float:
        """Strength over traction; inf where only compression acts, nan without a record."""
        if math.isnan(self.utilisation):
            return math.nan
        return 1.0 / self.utilisation if self.utilisation > 0 else math.inf


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class InterfaceResult:
    """Tractions on all n voxel faces between different resins.

    Attributes
    ----------
    resins : tuple of str
        What `pair` counts in.
    voxel : ndarray of intp, shape (n, 3)
        The voxel on the lower side of each face.
    axis : ndarray of int8, shape (n,)
        Along which axis the voxel on the upper side follows.
    pair : ndarray of int16, shape (n, 2)
        Resin on the lower and on the upper side.
    centre : ndarray of float64, shape (n, 3)
        mm.
    normal_vector : ndarray of float64, shape (n, 3)
        Unit normal of the interface without its steps, from the lower to the upper resin.
    area : ndarray of float64, shape (n,)
        Share of the interface without its steps, mm^2.
    traction : ndarray of float64, shape (n, 3)
        Force of the upper on the lower resin over that area, MPa.
    jump : ndarray of float64, shape (n,)
        See `InterfaceSpot`, MPa.
    solid_sides : ndarray of bool, shape (n,)
        Both voxels are at least half full; the others are not listed as worst places.
    stepped, at_edge : ndarray of bool, shape (n,)
        See `InterfaceSpot`.
    utilisation, utilisation_low, utilisation_high : ndarray of float64, shape (n,)
        See `InterfaceSpot`.
    missing : tuple of (str, str)
        Pairs that meet and have no record of their bond.
    bonds : tuple of Bond
        The records of the pairs that meet.
    """

    resins: tuple[str, ...]
    voxel: NDArray[np.intp]
    axis: NDArray[np.int8]
    pair: NDArray[np.int16]
    centre: Floats
    normal_vector: Floats
    area: Floats
    traction: Floats
    jump: Floats
    solid_sides: NDArray[np.bool_]
    stepped: NDArray[np.bool_]
    at_edge: NDArray[np.bool_]
    utilisation: Floats
    utilisation_low: Floats
    utilisation_high: Floats
    missing: tuple[tuple[str, str], ...]
    bonds: tuple[Bond, ...]

    def __len__(self) -> int:
        return len(self.axis)

    @property
    def normal(self) -> Floats:
        """Normal traction, MPa; positive pulls the resins apart."""
        return np.asarray((self.traction * self.normal_vector).sum(axis=1))

    @property
    def shear(self) -> Floats:
        """Size of the shear traction, MPa."""
        along = self.traction - self.normal[:, None] * self.normal_vector
        return np.asarray(np.linalg.norm(along, axis=1))

    def select(self, keep: NDArray[np.bool_]) -> InterfaceResult:
        """Some of the faces."""
        chosen: dict[str, Any] = {
            f.name: value[keep] if isinstance(value, np.ndarray) else value
            for f in dataclasses.fields(self)
            for value in (getattr(self, f.name),)
        }
        return InterfaceResult(**chosen)

    def names(self, face: int) -> tuple[str, str]:
        """The two resins of a face, in ascending order."""
        a, b = sorted(self.resins[c] for c in self.pair[face])
        return a, b

    def force(self, first: str, second: str) -> tuple[float, float, float]:
        """Force of all material of `second` on that of `first` over their interface, N."""
        a, b = self.resins.index(first), self.resins.index(second)
        whole = self.traction * self.area[:, None]
        up = (self.pair[:, 0] == a) & (self.pair[:, 1] == b)
        down = (self.pair[:, 0] == b) & (self.pair[:, 1] == a)
        x, y, z = (float(v) for v in whole[up].sum(axis=0) - whole[down].sum(axis=0))
        return x, y, z

"""Rules a design is made by: shared blends, robustness, scatter, a skin."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.measure import mask

__all__ = [
    "ChosenZones",
    "LoadScatter",
    "MaterialScatter",
    "Robust",
    "Skin",
    "Zones",
    "check_rules",
]

if TYPE_CHECKING:
    from voxelmat.model.design_spec import DesignSpec

_MOST_ZONES = 4096


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Zones:
    """One blend for all designed voxels of a zone.

    Attributes
    ----------
    numbers : ndarray of int, ``[i, j, k]``
        Number of each voxel's zone, from 1; 0 belongs to none and may only stand outside of what
        is designed.
    """

    numbers: NDArray[np.int64]

    def __post_init__(self) -> None:
        given = np.asarray(self.numbers)
        if given.ndim != 3 or given.dtype.kind not in "iu":
            raise InputError(
                f"Zones are a 3-D array of whole numbers; got {given.dtype}, {given.ndim}-D."
            )
        if given.size and (given.min() < 0 or given.max() > _MOST_ZONES):
            raise InputError(
                f"Zones are numbered 0 (none) to {_MOST_ZONES}; got {given.min()} to {given.max()}."
            )
        numbers = np.array(given, dtype=np.int64, order="F")
        numbers.flags.writeable = False
        object.__setattr__(self, "numbers", numbers)


@dataclass(frozen=True, slots=True, kw_only=True)
class ChosenZones:
    """At most this many blends in all, each for a zone that the optimiser chooses.

    The design is first made without zones, its blends are then grouped into that many, and the
    groups become the zones of a second run that starts from their means.
    """

    count: int

    def __post_init__(self) -> None:
        if not 1 <= self.count <= _MOST_ZONES:
            raise InputError(f"A design has 1 to {_MOST_ZONES} zones; got {self.count!r}.")


@dataclass(frozen=True, slots=True, kw_only=True)
class Robust:
    """The design must also hold where all borders lie a little further in or out.

    Attributes
    ----------
    margin : float
        By how much the thresholds of the eroded and the dilated design differ from the
        nominal one: 0.5 +- margin, in 0.05 to 0.4. More makes features larger.
    phases : bool or None
        Whether the borders between resins move, too. None: they do where only pure resins may be
        printed (a gradual blend has no border).
    """

    margin: float = 0.2
    phases: bool | None = None

    def __post_init__(self) -> None:
        if not 0.05 <= self.margin <= 0.4:
            raise InputError(
                f"The margin of a robust design lies in 0.05 to 0.4; got {self.margin!r}."
            )


@dataclass(frozen=True, slots=True, kw_only=True)
class MaterialScatter:
    """Judge by the mean plus some standard deviations over the scatter of the resins' moduli.

    Attributes
    ----------
    deviations : float
        How many are added to each measure (objective and limits that depend on stiffness).
    band : float
        How many standard deviations the low and the high end of a record's modulus are from its
        value; 2 for a range that holds about 95 %.
    together : bool
        True: all resins are softer or stiffer at once (one batch, one temperature, one age).
        False: each on its own.
    """

    deviations: float = 2.0
    band: float = 2.0
    together: bool = False

    def __post_init__(self) -> None:
        if not (math.isfinite(self.deviations) and 0 <= self.deviations <= 10):
            raise InputError(f"Deviations to add lie in 0 to 10; got {self.deviations!r}.")
        if not 0.5 <= self.band <= 10:
            raise InputError(f"A band spans 0.5 to 10 deviations a side; got {self.band!r}.")


@dataclass(frozen=True, slots=True, kw_only=True)
class LoadScatter:
    """Loads that may point, and act, a little elsewhere.

    Attributes
    ----------
    angle : float
        Degrees by which the direction deviates, about each axis across it (0 to 60).
    offset : float
        mm by which the load is off its place, along each of `axes`, both ways.
    axes : tuple of str
        Along which it may be off its place.
    load_cases : tuple of str
        Those that scatter; all where left out.
    judge : str
        ``"worst"``, or ``"mean"`` plus `deviations`, with angle and offset as one standard
        deviation.
    deviations : float
        For ``"mean"``.
    """

    angle: float = 0.0
    offset: float = 0.0
    axes: tuple[str, ...] = ()
    load_cases: tuple[str, ...] = ()
    judge: Literal["worst", "mean"] = "worst"
    deviations: float = 2.0

    def __post_init__(self) -> None:
        if not 0 <= self.angle <= 60:
            raise InputError(f"A load's direction deviates by 0 to 60 degrees; got {self.angle!r}.")
        if not (math.isfinite(self.offset) and self.offset >= 0):
            raise InputError(f"A load's place is off by >= 0 mm; got {self.offset!r}.")
        if any(len(a) != 1 or a not in "xyz" for a in self.axes):
            raise InputError(f"A load is off its place along x, y or z; got {self.axes}.")
        if self.angle == 0 and (self.offset == 0 or not self.axes):
            raise InputError(
                "A scatter of loads needs an angle in degrees, or an offset in mm and its axes."
            )
        if self.judge not in ("worst", "mean"):
            raise InputError(f"Scattered loads are judged by worst or mean; got {self.judge!r}.")
        if not (math.isfinite(self.deviations) and 0 <= self.deviations <= 10):
            raise InputError(f"Deviations to add lie in 0 to 10; got {self.deviations!r}.")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Skin:
    """The shape's surface is of one resin, and solid.

    Attributes
    ----------
    resin : str
        One of the design's resins.
    thickness : float
        mm; at least a voxel makes sense.
    region : ndarray of bool or None
        Where there is a skin, ``[i, j, k]``; everywhere where left out. Walls of voids that the
        optimiser makes have no skin.
    """

    resin: str
    thickness: float
    region: NDArray[np.bool_] | None = None

    def __post_init__(self) -> None:
        if not (math.isfinite(self.thickness) and self.thickness > 0):
            raise InputError(f"The thickness of a skin must be above 0 mm; got {self.thickness!r}.")
        if self.region is not None:
            object.__setattr__(self, "region", mask(self.region, "The region of a skin"))


def check_rules(spec: DesignSpec) -> None:
    """Refuse rules that are out of range or contradict each other.

    Raises
    ------
    InputError
    """
    _check_lengths(spec)
    _check_blends(spec)
    _check_links(spec)
    _check_robust(spec)
    if spec.skin is not None and spec.skin.resin not in spec.resins:
        raise InputError(
            f"The skin is of '{spec.skin.resin}', which is not among the resins of the design "
            f"({', '.join(spec.resins)})."
        )
    if spec.support_angle is not None:
        if not 10 <= spec.support_angle <= 80:
            raise InputError(
                f"A self-support angle lies in 10 to 80 degrees; got {spec.support_angle!r}."
            )
        if not spec.void:
            raise InputError(
                "A self-support angle is asked for, but the design allows no empty voxels, so "
                "there is no overhang; leave it out or set void to true."
            )
    if spec.most_resins is not None and spec.most_resins < 1:
        raise InputError(f"A design uses at least 1 resin; got most_resins {spec.most_resins!r}.")
    if spec.most_resins == 1 and not spec.void:
        raise InputError(
            "At most one resin and no empty voxels leave nothing to design; allow either."
        )


def _check_lengths(spec: DesignSpec) -> None:
    for name, length in (
        ("interface width", spec.interface_width),
        ("radius of the blends' filter", spec.blend_radius),
    ):
        if length is not None and not (math.isfinite(length) and length > 0):
            raise InputError(f"The {name} must be above 0 mm; got {length!r}.")


def _check_blends(spec: DesignSpec) -> None:
    if spec.blends not in ("free", "pure"):
        raise InputError(f"Blends are free or pure; got {spec.blends!r}.")
    if spec.interface_width is not None and spec.blends == "pure":
        raise InputError(
            f"Only pure resins are allowed, yet they shall change over {spec.interface_width:g} "
            "mm, which takes blends; allow blends or leave the interface width out."
        )
    if spec.interface_width is not None and spec.zones is not None:
        raise InputError(
            "One blend a zone and a least interface width contradict each other: blends jump at "
            "the borders of zones. Leave one of them out."
        )
    if spec.zones is not None and len(spec.resins) == 1:
        raise InputError(
            f"Zones share a blend, but '{spec.resins[0]}' is the only resin; name at least two."
        )


def _check_links(spec: DesignSpec) -> None:
    if any(a not in "xyz" or len(a) != 1 for a in (*spec.extruded, *spec.repeated)):
        raise InputError(
            "A design is extruded or repeated along x, y or z; got "
            f"{', '.join((*spec.extruded, *spec.repeated))}."
        )
    for axis, count in spec.repeated.items():
        if count < 2 or count != int(count):
            raise InputError(f"A design is repeated at least 2 times along {axis}; got {count!r}.")


def _check_robust(spec: DesignSpec) -> None:
    kinds = [type(s) for s in spec.scatter]
    if len(set(kinds)) != len(kinds):
        raise InputError("A scatter of one kind is given twice; keep one of materials, of loads.")
    if spec.robust is None:
        return
    pure = spec.blends == "pure" and len(spec.resins) > 1
    if spec.robust.phases and not pure:
        raise InputError(
            "Borders between resins shall move in and out, but blends are free and have no "
            "borders; allow pure resins only, or leave phases out."
        )
    if not spec.void and not pure:
        raise InputError(
            "A robust design needs borders that move: of voids, or between pure resins; this one "
            "has neither."
        )
    margin, threshold = spec.robust.margin, spec.projection.threshold
    if not margin < threshold < 1 - margin:
        raise InputError(
            f"The threshold {threshold:g} +- the margin {margin:g} leaves 0 to 1; lower the margin."
        )
    if spec.projection.sharpness[-1] == 0:
        raise InputError("A robust design needs a projection: end at a sharpness above 0.")

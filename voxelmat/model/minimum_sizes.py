"""Smallest sizes that a printer makes reliably, for each kind of feature, along each axis."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from voxelmat.errors import InputError

__all__ = ["SIZES", "MinimumSizes"]

#: Features that have a smallest size.
SIZES = ("wall", "gap", "hole", "strut", "text", "feature")

Triple = tuple[float, float, float]


@dataclass(frozen=True, slots=True, kw_only=True)
class MinimumSizes:
    """Smallest sizes that the printer makes reliably, mm.

    A size is one number, or a tuple of three along tray x, y and z. `wall` and the others then
    read as the largest of the three; `wall_xyz` and the others give all three.

    Attributes
    ----------
    wall, gap : float
        Thickness of a wall, width of a gap between two. Of three values, that of z is for walls
        and gaps that are thin along z: a wall of this kind lies flat.
    hole, strut : float
        Diameter. Of three values, that of z is for holes and struts that run along z: a strut of
        this kind stands upright.
    text : float
        Width of a stroke.
    feature : float
        Any feature that should show at all.
    along : tuple of (str, tuple of float)
        The three values of those that have three.

    Raises
    ------
    InputError
        If a size is not above 0 and at most 100 mm.

    Examples
    --------
    >>> sizes = MinimumSizes.of(wall=(0.4, 0.6, 0.2), gap=0.3)
    >>> sizes.wall, sizes.wall_xyz, sizes.gap_xyz
    (0.6, (0.4, 0.6, 0.2), (0.3, 0.3, 0.3))
    """

    wall: float = 0.4
    gap: float = 0.4
    hole: float = 0.5
    strut: float = 0.5
    text: float = 0.5
    feature: float = 0.3
    along: tuple[tuple[str, Triple], ...] = ()

    def __post_init__(self) -> None:
        known = dict(self.along)
        kept: dict[str, Triple] = {}
        for name in SIZES:
            given: object = getattr(self, name)
            if isinstance(given, int | float):
                before = known.get(name)
                if before is not None and max(before) == given:
                    kept[name] = before
                _check(name, given)
                object.__setattr__(self, name, float(given))
                continue
            values = tuple(given) if isinstance(given, Sequence) else ()
            if len(values) != 3 or isinstance(given, str):
                raise InputError(
                    f"A smallest size is a number, or three along x, y and z; got {given!r}.",
                    key=f"minimum_mm.{name}",
                )
            for value in values:
                _check(name, value)
            if len(set(values)) > 1:
                kept[name] = (float(values[0]), float(values[1]), float(values[2]))
            object.__setattr__(self, name, float(max(values)))
        object.__setattr__(self, "along", tuple(kept.items()))

    @classmethod
    def of(cls, **sizes: float | Sequence[float]) -> MinimumSizes:
        """From sizes that are numbers or triples, any of which may be left out."""
        plain: dict[str, Any] = dict(sizes)
        return cls(**plain)

    def xyz(self, name: str) -> Triple:
        """One size along tray x, y and z, mm."""
        largest: float = getattr(self, name)
        return dict(self.along).get(name, (largest, largest, largest))

    @property
    def wall_xyz(self) -> Triple:
        """Walls that are thin along tray x, y and z, mm."""
        return self.xyz("wall")

    @property
    def gap_xyz(self) -> Triple:
        """Gaps that are thin along tray x, y and z, mm."""
        return self.xyz("gap")

    @property
    def hole_xyz(self) -> Triple:
        """Diameters of holes that run along tray x, y and z, mm."""
        return self.xyz("hole")

    @property
    def strut_xyz(self) -> Triple:
        """Diameters of struts that run along tray x, y and z, mm."""
        return self.xyz("strut")

    @property
    def text_xyz(self) -> Triple:
        """Strokes of text along tray x, y and z, mm."""
        return self.xyz("text")

    @property
    def feature_xyz(self) -> Triple:
        """Features of any kind along tray x, y and z, mm."""
        return self.xyz("feature")

    def as_dict(self) -> dict[str, Any]:
        """Plain data: a number, or a list of three."""
        along = dict(self.along)
        return {n: list(along[n]) if n in along else getattr(self, n) for n in SIZES}


def _check(name: str, value: object) -> None:
    if (
        isinstance(value, bool)
        or not isinstance(value, int | float)
        or not (math.isfinite(value) and 0 < value <= 100)
    ):
        raise InputError(
            f"A smallest size must be above 0 and at most 100 mm; got {value!r}.",
            key=f"minimum_mm.{name}",
        )

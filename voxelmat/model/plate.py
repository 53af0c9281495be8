"""A rigid plate: a region of a part that moves as one body, and how it has moved."""

from __future__ import annotations

import math
from dataclasses import dataclass

from voxelmat.errors import InputError
from voxelmat.model.region import Region

__all__ = ["Plate", "PlateMotion"]

Vector = tuple[float, float, float]
Maybe = tuple[float | None, float | None, float | None]

_FREE: Maybe = (None, None, None)


@dataclass(frozen=True, slots=True, kw_only=True)
class Plate:
    """Nodes of a region that keep their places to one another, as if bonded to a stiff plate.

    Attributes
    ----------
    name : str
    region : Region
        Its nodes are joined; they must not lie on one line.
    point : tuple of float or None
        Reference point, mm: where the force acts, what the rotation turns about and the moment
        counts about. None takes the mean place of the nodes.
    translation : tuple of (float or None)
        Of the reference point along x, y, z, mm; None leaves that direction free.
    rotation : tuple of (float or None)
        Small rotation about x, y, z, radians; None leaves it free.
    force, moment : tuple of float
        On the plate, N and N mm, at the reference point; 0 where the motion is given.
    """

    name: str
    region: Region
    point: Vector | None = None
    translation: Maybe = _FREE
    rotation: Maybe = _FREE
    force: Vector = (0.0, 0.0, 0.0)
    moment: Vector = (0.0, 0.0, 0.0)

    def __post_init__(self) -> None:
        numbers = [v for v in (*self.translation, *self.rotation) if v is not None]
        numbers += [*self.force, *self.moment, *(self.point or ())]
        if not all(math.isfinite(v) for v in numbers):
            raise InputError(f"Plate '{self.name}': every number must be finite; got {numbers}.")
        for given, acts, what, push in (
            (self.translation, self.force, "translation", "force"),
            (self.rotation, self.moment, "rotation", "moment"),
        ):
            for axis, value, load in zip("xyz", given, acts, strict=True):
                if value is not None and load != 0:
                    raise InputError(
                        f"Plate '{self.name}' has both a given {what} and a {push} for axis "
                        f"{axis}. Give one of them: the other follows from the solve."
                    )

    @property
    def given(self) -> tuple[float | None, ...]:
        """Translation and rotation, six numbers or None."""
        return (*self.translation, *self.rotation)

    @property
    def moves(self) -> bool:
        """Whether a motion other than 0 is given."""
        return any(v not in (None, 0.0) for v in self.given)


@dataclass(frozen=True, slots=True, kw_only=True)
class PlateMotion:
    """How a plate has moved and what it does to the part.

    Attributes
    ----------
    point : tuple of float
        Reference point, mm.
    translation : tuple of float
        Of that point, mm.
    rotation : tuple of float
        Radians about x, y, z.
    force : tuple of float
        Of the plate on the part, N.
    moment : tuple of float
        Of the plate on the part about the reference point, N mm.
    """

    point: Vector
    translation: Vector
    rotation: Vector
    force: Vector
    moment: Vector

"""What an assembly is made of: bodies, and the rules by which gaps between them close."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from voxelmat.errors import InputError
from voxelmat.model.mesh import TriangleMesh

__all__ = ["Body", "Event", "GapRule", "check_bodies", "strength"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Body:
    """One mesh with what it is made of and how it meets others.

    Attributes
    ----------
    name : str
    mesh : TriangleMesh
    material : str
        Name of a resin, blend or stock material.
    priority : int, optional
        Where bodies overlap, the higher wins; needed only by bodies that overlap.
    bought_in : bool
        The body is not printed (a shaft, a screw). It takes part in the solve and is a
        cavity in the print. It always wins over printed bodies: it cannot be cut.
    clearance_mm : float
        Play left round a bought-in body in the print, mm.
    """

    name: str
    mesh: TriangleMesh
    material: str
    priority: int | None = None
    bought_in: bool = False
    clearance_mm: float = 0.0

    def __post_init__(self) -> None:
        if not self.name:
            raise InputError("A body needs a name.")
        if not (math.isfinite(self.clearance_mm) and self.clearance_mm >= 0):
            raise InputError(
                f"Body '{self.name}': the clearance is 0 mm or more; got {self.clearance_mm}."
            )
        if self.clearance_mm > 0 and not self.bought_in:
            raise InputError(
                f"Body '{self.name}' has a clearance of {self.clearance_mm} mm but is printed; "
                "only a bought-in body has one. Set bought_in, or leave the clearance out."
            )


@dataclass(frozen=True, slots=True, kw_only=True)
class GapRule:
    """Close gaps between two bodies that are narrower than a width.

    Attributes
    ----------
    first, second : str
        Names of the bodies.
    width_mm : float
        Gaps narrower than this are closed, mm.
    give_to : str
        Which of the two grows into the gap.
    """

    first: str
    second: str
    width_mm: float
    give_to: str

    def __post_init__(self) -> None:
        if not (math.isfinite(self.width_mm) and self.width_mm > 0):
            raise InputError(f"A gap's width must be above 0 mm; got {self.width_mm}.")
        if self.first == self.second:
            raise InputError(f"A gap lies between two bodies; got '{self.first}' twice.")
        if self.give_to not in (self.first, self.second):
            raise InputError(
                f"The gap between '{self.first}' and '{self.second}' can be given to one of them; "
                f"got '{self.give_to}'."
            )


@dataclass(frozen=True, slots=True, kw_only=True)
class Event:
    """Something that was decided while bodies were put together.

    Attributes
    ----------
    kind : str
        "overlap", "touch", "gap", "cavity" or "caution".
    bodies : tuple of str
    volume_mm3 : float
    place : tuple of float
        Where it is largest, mm.
    message : str
    """

    kind: str
    bodies: tuple[str, ...]
    volume_mm3: float
    place: tuple[float, float, float]
    message: str


def strength(body: Body) -> tuple[bool, float]:
    """Sort key: of two bodies that overlap, the one with the larger key wins."""
    return body.bought_in, -math.inf if body.priority is None else body.priority


def check_bodies(bodies: Sequence[Body], gaps: Sequence[GapRule]) -> None:
    """Raise `InputError` unless names are distinct and gap rules name bodies."""
    if not bodies:
        raise InputError("An assembly needs at least one body; got none.")
    names = [body.name for body in bodies]
    twice = sorted({name for name in names if names.count(name) > 1})
    if twice:
        raise InputError(f"Bodies need different names; '{twice[0]}' is used more than once.")
    if all(body.bought_in for body in bodies):
        raise InputError("Every body is bought in, so there is nothing to print.")
    for rule in gaps:
        for name in (rule.first, rule.second):
            if name not in names:
                raise InputError(
                    f"A gap rule names the body '{name}', but the bodies are {', '.join(names)}."
                )

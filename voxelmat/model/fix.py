"""Repairs of a design: what was changed, what was refused and why."""

from __future__ import annotations

from dataclasses import dataclass

from voxelmat.errors import InputError
from voxelmat.model.finding import Finding
from voxelmat.model.part import Part
from voxelmat.units import number

__all__ = ["DrainHole", "FixResult", "FixStep", "Refusal"]

Triple = tuple[float, float, float]


@dataclass(frozen=True, slots=True, kw_only=True)
class DrainHole:
    """A straight hole from a cavity outwards, chosen by a person.

    Attributes
    ----------
    point_mm, direction : tuple of float
        In the cavity, and the way out; part coordinates.
    diameter_mm : float or None
        None for the least that the profile allows.
    """

    point_mm: Triple
    direction: Triple
    diameter_mm: float | None = None

    def __post_init__(self) -> None:
        if not any(self.direction):
            raise InputError("A drain hole needs a direction other than 0, 0, 0.", key="drain")
        if self.diameter_mm is not None and not self.diameter_mm > 0:
            raise InputError(
                f"A drain hole has a diameter above 0 mm; got {self.diameter_mm}.", key="drain"
            )


@dataclass(frozen=True, slots=True, kw_only=True)
class FixStep:
    """One repair that was made.

    Attributes
    ----------
    name : str
        "remove speck", "drain" or "thicken".
    message : str
    place_mm : tuple of float
    added_mm3, removed_mm3 : float
        Volume of resin.
    voxels : int
        That changed.
    """

    name: str
    message: str
    place_mm: Triple
    added_mm3: float
    removed_mm3: float
    voxels: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Refusal:
    """A finding that was left alone, and why."""

    finding: Finding
    reason: str


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class FixResult:
    """A new part and how it came about; the old one is untouched.

    Attributes
    ----------
    before, part : Part
    steps : tuple of FixStep
    refused : tuple of Refusal
    """

    before: Part
    part: Part
    steps: tuple[FixStep, ...]
    refused: tuple[Refusal, ...]

    def rows(self) -> list[list[str]]:
        """Volume of each resin before and after, mm^3, as text."""
        old, new = self.before.volumes(), self.part.volumes()
        return [
            [n, number(old.get(n, 0), 4), number(new.get(n, 0), 4),
             f"{new.get(n, 0) - old.get(n, 0):+.3g}"]
            for n in dict.fromkeys([*old, *new])
        ]  # fmt: skip

    def text(self) -> str:
        """What was done and what was not, for a terminal."""
        lines = [
            f"  {s.name}: {s.message} (+{number(s.added_mm3)} / -{number(s.removed_mm3)} mm^3, "
            f"{s.voxels} voxels) at {', '.join(number(v) for v in s.place_mm)} mm"
            for s in self.steps
        ] or ["  nothing was changed"]
        lines += [f"  left alone: {r.finding.code}: {r.reason}" for r in self.refused]
        lines += ["  resin: before, after, change in mm^3"]
        lines += [f"    {name}: {a}, {b}, {c}" for name, a, b, c in self.rows()]
        return "\n".join(lines)

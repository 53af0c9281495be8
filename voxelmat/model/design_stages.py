"""What a design is worth on its way to the printer, and what each of its limits costs."""

from __future__ import annotations

import math
from dataclasses import dataclass

from voxelmat.units import number, quantity

__all__ = ["Price", "Reach", "StagedValue", "shown"]

#: A limit counts as met within this share of it.
_SLACK = 1e-3
#: A change of a value that people are told of.
_WORTH_TELLING = 0.01


@dataclass(frozen=True, slots=True, kw_only=True)
class StagedValue:
    """One objective or limited quantity, three times.

    Attributes
    ----------
    name, unit : str
    sense : str
        ``"least"`` or ``"greatest"`` for the objective, ``"at most"`` or ``"at least"``.
    limit : float or None
        None for the objective.
    optimised : float
        Of the design as the optimiser left it.
    palette : float
        Of the part that was made of it, with its palette and its outline.
    printed : float or None
        Of the stack, halftoned, read back and averaged; None where there is none.
    """

    name: str
    unit: str
    sense: str
    limit: float | None
    optimised: float
    palette: float
    printed: float | None = None

    def met(self, value: float) -> bool:
        """Whether a value keeps the limit, within a thousandth of it."""
        if self.limit is None:
            return True
        room = _SLACK * abs(self.limit)
        over = value - self.limit if self.sense == "at most" else self.limit - value
        return bool(over <= room)

    @property
    def remarks(self) -> tuple[str, ...]:
        """What making or printing the part changed, where it changed much or broke a limit."""
        found = []
        steps = [("With its palette and outline", self.palette)]
        if self.printed is not None:
            steps.append(("As printed", self.printed))
        size = abs(self.optimised if self.limit is None else self.limit)
        for words, value in steps:
            change = abs(value - self.optimised)
            broken = self.met(self.optimised) and not self.met(value)
            if not math.isfinite(value):
                found.append(
                    f"{words} the {self.name} cannot be found: the part does not hang together "
                    "where the load passes; let it run longer, or allow more material."
                )
            elif broken or change > _WORTH_TELLING * max(size, 1e-300):
                now, unit = shown(value, self.unit)
                was = number(shown(self.optimised, self.unit)[0])
                limit = (
                    ""
                    if self.limit is None
                    else f" ({self.sense} {number(shown(self.limit, self.unit)[0])})"
                )
                end = ", which breaks the limit." if broken else "."
                found.append(
                    f"{words} the {self.name} is {quantity(now, unit)} instead of {was}{limit}{end}"
                )
        return tuple(found)


@dataclass(frozen=True, slots=True, kw_only=True)
class Price:
    """What moving one limit would do to the objective, to first order.

    Attributes
    ----------
    name, unit : str
        Of the limited quantity.
    sense : str
        ``"at most"`` or ``"at least"``.
    limit : float
    objective : str
    objective_value : float
    slope : float
        Change of the objective, in its unit, a unit of the limit.
    """

    name: str
    unit: str
    sense: str
    limit: float
    objective: str
    objective_value: float
    slope: float

    @property
    def sentence(self) -> str:
        """Such as "Mass: 0.2 g more (1 % of the limit) buys 3 % less compliance"."""
        if self.slope == 0:
            return f"The limit on {self.name} holds the objective back by nothing, to first order."
        step = 0.01 * abs(self.limit)
        looser = "more" if self.sense == "at most" else "less"
        change = step * abs(self.slope)
        share = change / max(abs(self.objective_value), 1e-300)
        better = "less" if (self.slope < 0) == (self.sense == "at most") else "more"
        return (
            f"{self.name[0].upper()}{self.name[1:]}: {quantity(*shown(step, self.unit))} {looser} "
            f"(1 % of the limit) buys {number(100 * share, 2)} % {better} {self.objective}."
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class Reach:
    """Between which values a measure can lie at all, from designs at the ends of the choice.

    Attributes
    ----------
    name, unit : str
    sense : str
        What is asked for: ``"least"``, ``"greatest"``, ``"at most"``, ``"at least"``.
    limit : float or None
    least, greatest : float
    of_least, of_greatest : str
        Which designs have them.
    bound : bool
        True where no design at all lies outside; otherwise these are the best of some that were
        tried.
    """

    name: str
    unit: str
    sense: str
    limit: float | None
    least: float
    greatest: float
    of_least: str
    of_greatest: str
    bound: bool

    @property
    def missed_by(self) -> float:
        """How far the limit lies beyond what is reached; 0 where it does not."""
        if self.limit is None:
            return 0.0
        if self.sense == "at most":
            return max(self.least - self.limit, 0.0)
        return max(self.limit - self.greatest, 0.0)

    @property
    def sentence(self) -> str:
        """The range in words, and how far the limit lies outside."""
        what = "lies between" if self.bound else "of the designs tried lies between"
        low, unit = shown(self.least, self.unit)
        text = (
            f"The {self.name} {what} {number(low)} ({self.of_least}) and "
            f"{quantity(shown(self.greatest, self.unit)[0], unit)} ({self.of_greatest})"
        )
        if self.missed_by == 0 or self.limit is None:
            return text + "."
        return (
            f"{text}, but {self.sense} {quantity(*shown(self.limit, self.unit))} is asked for: "
            f"{quantity(*shown(self.missed_by, self.unit))} out of reach."
        )


def shown(value: float, unit: str) -> tuple[float, str]:
    """Mass in grams for people."""
    return (value * 1e6, "g") if unit == "tonne" else (value, unit)

"""A requirement on a part, and the verdict on it: met, not met, or cannot be said."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

from voxelmat.errors import InputError

__all__ = ["MEASURES", "Requirement", "Status", "Verdict", "judge"]

Status = Literal["met", "not met", "cannot be said"]

#: What can be required, with its unit.
MEASURES = {
    "displacement": "mm",  # component or size, mean or largest over a region
    "stiffness": "N/mm",  # resultant of a load over the mean displacement of its region
    "reaction": "N",  # a support's force along an axis
    "safety factor": "",  # smallest strength over stress in a region
    "interface safety factor": "",  # smallest bond strength over traction between resins
    "largest strain": "",  # largest principal strain in a region
    "mass": "g",
    "volume": "mm3",  # of one resin, or of all
    "deflection error": "mm",  # rms distance from a target deflection map
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Requirement:
    """A measured quantity and the range it must lie in.

    Attributes
    ----------
    name : str
    measure : str
        A key of `MEASURES`.
    at_least, at_most : float or None
        In the unit of the measure; one of them at least.
    load_case : str or None
    region : str or None
        Name of a region of the design.
    component : str
        ``"x"``, ``"y"``, ``"z"`` (signed) or ``"size"``.
    reduce : str
        ``"mean"``, ``"max"`` or ``"min"`` over the region.
    resin : str or None
        For mass and volume: of this resin alone.
    target : str or None
        For the deflection error: name of the target that it is measured from.
    """

    name: str
    measure: str
    at_least: float | None = None
    at_most: float | None = None
    load_case: str | None = None
    region: str | None = None
    component: str = "size"
    reduce: str = "max"
    resin: str | None = None
    target: str | None = None

    def __post_init__(self) -> None:
        if self.measure not in MEASURES:
            raise InputError(
                f"Requirement '{self.name}' measures {self.measure!r}; use one of "
                f"{', '.join(MEASURES)}."
            )
        limits = [v for v in (self.at_least, self.at_most) if v is not None]
        if not limits or not all(math.isfinite(v) for v in limits):
            raise InputError(f"Requirement '{self.name}' needs a finite at_least or at_most.")
        if len(limits) == 2 and limits[0] > limits[1]:
            raise InputError(
                f"Requirement '{self.name}' asks for at least {limits[0]} and at most {limits[1]}."
            )
        if self.component not in ("x", "y", "z", "size"):
            raise InputError(f"Requirement '{self.name}': component is x, y, z or size.")
        if self.reduce not in ("mean", "max", "min"):
            raise InputError(f"Requirement '{self.name}': reduce is mean, max or min.")

    @property
    def unit(self) -> str:
        """Unit of the measure and of the limits."""
        return MEASURES[self.measure]


@dataclass(frozen=True, slots=True, kw_only=True)
class Verdict:
    """The answer to one requirement.

    Attributes
    ----------
    requirement : Requirement
    value, low, high : float
        The computed value, and the band that the inputs' spread allows.
    status : {"met", "not met", "cannot be said"}
    reasons : tuple of str
        Why it cannot be said, or what stands behind the answer.
    margin : float
        Distance to the nearest limit over that limit's size; negative beyond the limit.
    """

    requirement: Requirement
    value: float
    low: float
    high: float
    status: Status
    reasons: tuple[str, ...]
    margin: float


def _margin(requirement: Requirement, value: float) -> float:
    found = []
    if requirement.at_most is not None:
        found.append((requirement.at_most - value) / (abs(requirement.at_most) or 1.0))
    if requirement.at_least is not None:
        found.append((value - requirement.at_least) / (abs(requirement.at_least) or 1.0))
    return min(found)


def judge(
    requirement: Requirement,
    value: float,
    band: tuple[float, float] | None = None,
    doubts: Sequence[str] = (),
) -> Verdict:
    """Compare a value and its band with the limits.

    Parameters
    ----------
    requirement : Requirement
    value : float
        In the requirement's unit.
    band : tuple of float, optional
        What the value may be, given the spread of the inputs.
    doubts : sequence of str
        Reasons that make the value itself unsafe to judge (data that are indicative only,
        conditions outside a record, strain above the method's limit).

    Returns
    -------
    Verdict
        "cannot be said" where there are doubts, where the band straddles a limit, or where
        the value is not finite.
    """
    low, high = (value, value) if band is None else band
    reasons = list(doubts)
    if not all(math.isfinite(v) for v in (value, low, high)):
        reasons.append("the value could not be computed")
        return Verdict(
            requirement=requirement,
            value=value,
            low=low,
            high=high,
            status="cannot be said",
            reasons=tuple(reasons),
            margin=math.nan,
        )
    low, high = min(low, high, value), max(low, high, value)
    inside = all(_margin(requirement, v) >= 0 for v in (low, high))
    above = requirement.at_most is not None and low > requirement.at_most
    below = requirement.at_least is not None and high < requirement.at_least
    if not (inside or above or below):
        reasons.append(
            f"the band {low:.3g} to {high:.3g} {requirement.unit} straddles the limit".replace(
                "  ", " "
            )
        )
    status: Status
    if reasons:
        status = "cannot be said"
    else:
        status = "met" if inside else "not met"
    return Verdict(
        requirement=requirement,
        value=value,
        low=low,
        high=high,
        status=status,
        reasons=tuple(reasons),
        margin=_margin(requirement, value),
    )

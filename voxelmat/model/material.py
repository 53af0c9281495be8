"""One resin or bought-in material: constants with range, test conditions and source."""

from __future__ import annotations

import dataclasses
import itertools
import math
import re
from dataclasses import dataclass
from typing import Any

import numpy as np

from voxelmat.errors import InputError
from voxelmat.provenance import text_digest

__all__ = ["INDICATIVE", "KINDS", "Constant", "Material", "TemperatureFactor"]

#: What `Constant.source` says where nothing published or measured stands behind a value.
INDICATIVE = "indicative"
#: What a material can be.
KINDS = ("rigid", "elastomer", "high-temperature", "support", "bought-in")

_NAME = re.compile(r"^[a-z0-9][a-z0-9._-]*$")
_COLOUR = re.compile(r"^#[0-9A-Fa-f]{6}$")


@dataclass(frozen=True, slots=True, kw_only=True)
class Constant:
    """A measured value with its range.

    Attributes
    ----------
    value, low, high : float
        The value and the range it is expected in (``low <= value <= high``).
    unit : str
        Inside unit, for example ``"MPa"``.
    source : str
        Where it comes from, or ``"indicative"``.
    temperature_degC : float
        Test temperature.
    rate_per_s : float or None
        Strain rate of the test, 1/s, where one applies.
    """

    value: float
    low: float | None = None
    high: float | None = None
    unit: str = ""
    source: str = INDICATIVE
    temperature_degC: float = 23.0
    rate_per_s: float | None = None

    def __post_init__(self) -> None:
        low = self.value if self.low is None else self.low
        high = self.value if self.high is None else self.high
        if not (math.isfinite(self.value) and low <= self.value <= high and math.isfinite(high)):
            raise InputError(
                f"A constant needs finite low <= value <= high; got low {self.low}, "
                f"value {self.value}, high {self.high} {self.unit}."
            )
        if not math.isfinite(self.temperature_degC):
            raise InputError(f"The test temperature must be finite; got {self.temperature_degC}.")
        object.__setattr__(self, "low", float(low))
        object.__setattr__(self, "high", float(high))
        object.__setattr__(self, "value", float(self.value))

    @property
    def indicative(self) -> bool:
        """True where no source stands behind the value."""
        return self.source.strip().lower().startswith(INDICATIVE)

    @property
    def band(self) -> tuple[float, float]:
        """``(low, high)``."""
        return (self.low or 0.0, self.high if self.high is not None else self.value)

    def as_dict(self) -> dict[str, Any]:
        """Plain data."""
        return dataclasses.asdict(self)


@dataclass(frozen=True, slots=True, kw_only=True)
class TemperatureFactor:
    """By how much a property falls or rises with temperature.

    Attributes
    ----------
    temperature_degC : tuple of float
        Rising, at least two.
    factor : tuple of float
        The property over that at any one temperature (> 0).
    source : str
    """

    temperature_degC: tuple[float, ...]
    factor: tuple[float, ...]
    source: str = INDICATIVE

    def __post_init__(self) -> None:
        t, f = self.temperature_degC, self.factor
        if len(t) < 2 or len(t) != len(f):
            raise InputError(
                f"A course over temperature needs two or more temperatures and as many factors; "
                f"got {len(t)} and {len(f)}."
            )
        if not all(map(math.isfinite, (*t, *f))) or not all(v > 0 for v in f):
            raise InputError(f"Temperatures must be finite and factors above 0; got {t} and {f}.")
        if any(b <= a for a, b in itertools.pairwise(t)):
            raise InputError(f"Temperatures must rise from one to the next; got {t} degC.")

    def covers(self, temperature_degC: float) -> bool:
        """Whether a temperature lies within the course."""
        return self.temperature_degC[0] <= temperature_degC <= self.temperature_degC[-1]

    def at(self, temperature_degC: float) -> float:
        """The factor, straight between the temperatures, that of the end beyond them."""
        return float(np.interp(temperature_degC, self.temperature_degC, self.factor))


@dataclass(frozen=True, slots=True, kw_only=True)
class Material:
    """A resin, a support or a bought-in body's material.

    Attributes
    ----------
    name : str
        Lower-case name without spaces.
    kind : str
        One of `KINDS`.
    E : Constant
        Young's modulus at small strain, MPa (> 0).
    nu : Constant
        Poisson's ratio, 0 <= nu < 0.5.
    density : Constant
        tonne/mm^3 (> 0); 1 g/cm^3 is 1e-9.
    strength : Constant or None
        Tensile strength, MPa.
    strength_over_temperature : TemperatureFactor or None
        How the strength changes with temperature; covers `temperature_range_degC`.
    elongation : Constant or None
        Elongation at break as a fraction (1.5 means 150 %).
    expansion : Constant or None
        Coefficient of thermal expansion, 1/K.
    conductivity : Constant or None
        Thermal conductivity, W/(m K), which is mW/(mm K) (> 0).
    heat_capacity : Constant or None
        Specific heat capacity, J/(kg K) (> 0); 1e6 times as much in mJ/(tonne K).
    loss_factor : Constant or None
        Tangent of the loss angle: energy lost in a cycle over 2 pi times the energy stored (> 0).
    shore_A : float or None
        Shore A hardness.
    glass_transition_degC : float or None
    temperature_range_degC : tuple of float
        Between which the record's values may be used.
    max_duration_s : float
        Longest load the record's values are meant for; creep beyond it is unknown.
    max_cycles : int
        Most load cycles the record's strength is meant for.
    cost_per_kg : float or None
        In the currency of the user.
    colour : str
        ``#rrggbb``, always shown with the name beside it.
    notes : str
    """

    name: str
    kind: str
    E: Constant
    nu: Constant
    density: Constant
    strength: Constant | None = None
    strength_over_temperature: TemperatureFactor | None = None
    elongation: Constant | None = None
    expansion: Constant | None = None
    conductivity: Constant | None = None
    heat_capacity: Constant | None = None
    loss_factor: Constant | None = None
    shore_A: float | None = None
    glass_transition_degC: float | None = None
    temperature_range_degC: tuple[float, float] = (15.0, 30.0)
    max_duration_s: float = 60.0
    max_cycles: int = 1
    cost_per_kg: float | None = None
    colour: str = "#999999"
    notes: str = ""

    def __post_init__(self) -> None:
        if not _NAME.match(self.name):
            raise InputError(
                f"A material's name uses a-z, 0-9, '.', '_' and '-', and has no spaces; "
                f"got {self.name!r}."
            )
        if self.kind not in KINDS:
            raise InputError(
                f"Material '{self.name}' has kind {self.kind!r}; use one of {', '.join(KINDS)}."
            )
        if not (self.E.band[0] > 0):
            raise InputError(
                f"Material '{self.name}': the modulus must be above 0 MPa over its whole range; "
                f"got {self.E.band[0]} to {self.E.band[1]} MPa."
            )
        if not (self.nu.band[0] >= 0 and self.nu.band[1] < 0.5):
            raise InputError(
                f"Material '{self.name}': Poisson's ratio must lie in 0 <= nu < 0.5 (for a rubber "
                f"use 0.49 to 0.4995); got {self.nu.band[0]} to {self.nu.band[1]}."
            )
        if not (self.density.band[0] > 0):
            raise InputError(f"Material '{self.name}': the density must be above 0.")
        for label, constant in (("strength", self.strength), ("elongation", self.elongation)):
            if constant is not None and not (constant.band[0] > 0):
                raise InputError(f"Material '{self.name}': the {label} must be above 0.")
        for label, constant, most, unit in (
            ("conductivity", self.conductivity, 5000.0, "W/(m K)"),
            ("heat capacity", self.heat_capacity, 20000.0, "J/(kg K)"),
            ("loss factor", self.loss_factor, 5.0, "(a fraction, not per cent)"),
        ):
            # The upper limits lie above every known material; beyond them a unit was mixed up.
            if constant is not None and not (constant.band[0] > 0 and constant.band[1] < most):
                raise InputError(
                    f"Material '{self.name}': the {label} must lie above 0 and below {most:g} "
                    f"{unit}; got {constant.band[0]:g} to {constant.band[1]:g}."
                )
        self._check_course()
        if not _COLOUR.match(self.colour):
            raise InputError(
                f"Material '{self.name}': a colour is written #rrggbb; got {self.colour!r}."
            )

    def _check_course(self) -> None:
        course = self.strength_over_temperature
        if course is None:
            return
        if self.strength is None:
            raise InputError(
                f"Material '{self.name}': a strength over temperature needs a strength."
            )
        needed = (*self.temperature_range_degC, self.strength.temperature_degC)
        if not all(map(course.covers, needed)):
            raise InputError(
                f"Material '{self.name}': the strength over temperature goes from "
                f"{course.temperature_degC[0]:g} to {course.temperature_degC[-1]:g} degC; it must "
                f"cover the conditions and the test temperature, {min(needed):g} to "
                f"{max(needed):g} degC."
            )

    def strength_at(self, temperature_degC: float) -> Constant | None:
        """The strength at a temperature with its range, MPa; None where the record has none.

        Without a course over temperature it is that of the test, for any temperature; that the
        record's conditions are left is said elsewhere.
        """
        strength, course = self.strength, self.strength_over_temperature
        if strength is None or course is None:
            return strength
        ratio = course.at(temperature_degC) / course.at(strength.temperature_degC)
        low, high = strength.band
        unproven = course.source.strip().lower().startswith(INDICATIVE)
        return dataclasses.replace(
            strength,
            value=strength.value * ratio,
            low=low * ratio,
            high=high * ratio,
            temperature_degC=temperature_degC,
            source=course.source if unproven else f"{strength.source}; {course.source}",
        )

    @property
    def bulk(self) -> float:
        """Bulk modulus K = E / (3 (1 - 2 nu)), MPa."""
        return self.E.value / (3.0 * (1.0 - 2.0 * self.nu.value))

    @property
    def shear(self) -> float:
        """Shear modulus G = E / (2 (1 + nu)), MPa."""
        return self.E.value / (2.0 * (1.0 + self.nu.value))

    @property
    def indicative(self) -> bool:
        """True where the stiffness has no source."""
        return self.E.indicative or self.nu.indicative

    def as_dict(self) -> dict[str, Any]:
        """Plain data."""
        return dataclasses.asdict(self)

    @property
    def digest(self) -> str:
        """SHA-256 over everything the material says."""
        return text_digest(self.as_dict())

    def replace(self, **changes: Any) -> Material:
        """A copy with `changes`, validated again."""
        return dataclasses.replace(self, **changes)

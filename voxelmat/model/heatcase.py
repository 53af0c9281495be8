"""One case of heat conduction: held temperatures, films to the surroundings, heat that flows in.

Heat is energy in mJ (N mm) and flows in mW (mJ/s). 1 W/(m^2 K) = 1e-3 mW/(mm^2 K);
1 kW/m^2 = 1 mW/mm^2; 1 W/cm^3 = 1 mW/mm^3; conductivity 1 W/(m K) = 1 mW/(mm K).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from voxelmat.errors import InputError
from voxelmat.model.region import Region

__all__ = ["Convection", "FixedTemperature", "HeatCase", "HeatFlux", "HeatSource"]

_ABSOLUTE_ZERO = -273.15


def _temperature(value: float, what: str) -> None:
    if not (math.isfinite(value) and value >= _ABSOLUTE_ZERO):
        raise InputError(f"{what} must be at least {_ABSOLUTE_ZERO} degC; got {value}.")


def _where(region: Region | None) -> str:
    return "the whole part" if region is None else f"'{region.name}'"


@dataclass(frozen=True, slots=True, kw_only=True)
class FixedTemperature:
    """Nodes of a region that stay at a temperature, degC."""

    region: Region
    temperature_degC: float

    def __post_init__(self) -> None:
        _temperature(self.temperature_degC, f"The temperature held on '{self.region.name}'")


@dataclass(frozen=True, slots=True, kw_only=True)
class Convection:
    """A film between the exposed surface of a region and its surroundings.

    Each face counts with its share of the true surface (its area projected on the true normal),
    not with the larger area of the staircase of voxels.

    Attributes
    ----------
    film_W_per_m2_K : float
        Film coefficient, > 0. Still air 5 to 10, a fan 20 to 100 (from memory, indicative).
    ambient_degC : float
    region : Region or None
        None for all exposed surface.
    """

    film_W_per_m2_K: float
    ambient_degC: float
    region: Region | None = None

    def __post_init__(self) -> None:
        if not (math.isfinite(self.film_W_per_m2_K) and self.film_W_per_m2_K > 0):
            raise InputError(
                f"The film coefficient on {_where(self.region)} must be above 0 W/(m^2 K); got "
                f"{self.film_W_per_m2_K}. Surface without a film loses no heat: leave it out."
            )
        _temperature(self.ambient_degC, f"The surroundings of {_where(self.region)}")

    @property
    def film(self) -> float:
        """Film coefficient, mW/(mm^2 K)."""
        return 1e-3 * self.film_W_per_m2_K


@dataclass(frozen=True, slots=True, kw_only=True)
class HeatFlux:
    """Heat that enters (positive) through the true exposed surface of a region, mW/mm^2."""

    flux_mW_per_mm2: float
    region: Region | None = None

    def __post_init__(self) -> None:
        if not math.isfinite(self.flux_mW_per_mm2):
            raise InputError(
                f"The heat flux on {_where(self.region)} must be finite; got "
                f"{self.flux_mW_per_mm2} mW/mm^2."
            )


@dataclass(frozen=True, slots=True, kw_only=True)
class HeatSource:
    """Heat made in the material of a region, a volume or in all; give exactly one.

    Attributes
    ----------
    density_mW_per_mm3 : float or None
        A filled volume.
    total_mW : float or None
        Spread evenly over the filled volume.
    region : Region or None
        None for the whole part.
    """

    density_mW_per_mm3: float | None = None
    total_mW: float | None = None
    region: Region | None = None

    def __post_init__(self) -> None:
        given = [v for v in (self.density_mW_per_mm3, self.total_mW) if v is not None]
        if len(given) != 1 or not math.isfinite(given[0]):
            raise InputError(
                f"The heat source in {_where(self.region)} takes one finite value, "
                f"density_mW_per_mm3 or total_mW; got {self.density_mW_per_mm3} and "
                f"{self.total_mW}."
            )


@dataclass(frozen=True, slots=True, kw_only=True)
class HeatCase:
    """What acts on a part thermally, constant in time.

    Surface that nothing acts on is insulated; materials that meet are in perfect contact.

    Attributes
    ----------
    name : str
    fixed : tuple of FixedTemperature
    convection : tuple of Convection
        Where two reach the same face, their films add up (with a caution).
    flux : tuple of HeatFlux
    sources : tuple of HeatSource
    initial_degC : float
        Of the whole part at the start; a steady case does not depend on it.
    """

    name: str
    fixed: tuple[FixedTemperature, ...] = ()
    convection: tuple[Convection, ...] = ()
    flux: tuple[HeatFlux, ...] = ()
    sources: tuple[HeatSource, ...] = ()
    initial_degC: float = 23.0

    def __post_init__(self) -> None:
        _temperature(self.initial_degC, f"Heat case '{self.name}': the initial temperature")
        kinds = (
            (self.fixed, FixedTemperature),
            (self.convection, Convection),
            (self.flux, HeatFlux),
            (self.sources, HeatSource),
        )
        for group, kind in kinds:
            for one in group:
                if not isinstance(one, kind):
                    raise InputError(
                        f"Heat case '{self.name}': {one!r} stands where a {kind.__name__} belongs."
                    )

"""Says in words where a material is used outside the conditions of its record."""

from __future__ import annotations

import math

from voxelmat.errors import InputError
from voxelmat.model.material import Material
from voxelmat.units import number

__all__ = ["NEAR_GLASS_TRANSITION_K", "RATE_FACTOR", "cautions_for"]

#: Closer to the glass transition than this, stiffness changes fast (common practice, no source).
NEAR_GLASS_TRANSITION_K = 15.0
#: A strain rate that differs by more than this factor is another test (common practice).
RATE_FACTOR = 10.0


def _duration(seconds: float) -> str:
    for size, unit in ((86400.0, "days"), (3600.0, "h"), (60.0, "min")):
        if seconds >= 2 * size:
            return f"{number(seconds / size)} {unit}"
    return f"{number(seconds)} s"


def _check(**given: float) -> None:
    for key, value in given.items():
        limit = -273.15 if key == "temperature_degC" else 0.0
        if not (math.isfinite(value) and value >= limit):
            raise InputError(f"{key} must be finite and at least {limit:g}; got {value}.", key=key)


def _temperature(material: Material, temperature: float) -> list[str]:
    found = []
    low, high = material.temperature_range_degC
    if not low <= temperature <= high:
        found.append(
            f"{material.name} is used at {number(temperature)} degC; its values are for "
            f"{number(low)} to {number(high)} degC."
        )
    glass = material.glass_transition_degC
    if glass is None:
        return found
    rubber = material.kind == "elastomer"
    if abs(temperature - glass) < NEAR_GLASS_TRANSITION_K:
        found.append(
            f"{material.name} is used at {number(temperature)} degC, close to its glass "
            f"transition at {number(glass)} degC: stiffness and damping change fast there."
        )
    elif rubber and temperature < glass:
        found.append(
            f"{material.name} is glassy at {number(temperature)} degC (glass transition "
            f"{number(glass)} degC): it is far stiffer than its record says."
        )
    elif not rubber and temperature > glass:
        found.append(
            f"{material.name} is rubbery at {number(temperature)} degC (glass transition "
            f"{number(glass)} degC): it is far softer than its record says."
        )
    return found


def cautions_for(
    material: Material,
    *,
    temperature_degC: float,
    duration_s: float,
    cycles: float,
    rate_per_s: float | None = None,
) -> list[str]:
    """Cautions about values of `material` used outside their record's conditions.

    Parameters
    ----------
    material : Material
    temperature_degC : float
        Of the load case.
    duration_s : float
        How long the load stays.
    cycles : float
        How often it comes.
    rate_per_s : float, optional
        Strain rate of the load, 1/s, where it is known.

    Returns
    -------
    list of str
        One sentence a caution; empty where the record covers the use.

    Raises
    ------
    InputError
        If a condition is nan, infinite or negative.
    """
    _check(temperature_degC=temperature_degC, duration_s=duration_s, cycles=float(cycles))
    found = _temperature(material, temperature_degC)
    if duration_s > material.max_duration_s:
        found.append(
            f"{material.name} is loaded for {_duration(duration_s)}; its record covers "
            f"{_duration(material.max_duration_s)}. It will creep, and give more than is said here."
        )
    if cycles > material.max_cycles:
        found.append(
            f"{material.name} is loaded {number(cycles, 6)} times; its record covers "
            f"{number(material.max_cycles, 6)}. Fatigue lowers its strength by an unknown amount."
        )
    tested = material.E.rate_per_s
    if rate_per_s is not None and tested is not None:
        _check(rate_per_s=rate_per_s)
        if not tested / RATE_FACTOR <= rate_per_s <= tested * RATE_FACTOR:
            stiffer = "stiffer" if rate_per_s > tested else "softer"
            found.append(
                f"{material.name} is strained at {number(rate_per_s)} per s; its modulus was "
                f"taken at {number(tested)} per s. It will be {stiffer} than is said here."
            )
    return found

"""Shore A hardness to Young's modulus and back, as a band between two relations that differ."""

from __future__ import annotations

import math
from dataclasses import dataclass

from voxelmat.errors import InputError

__all__ = [
    "GENT_ACCURACY",
    "VALID_SHORE_A",
    "HardnessBand",
    "ModulusBand",
    "modulus_by_gent",
    "modulus_by_log",
    "modulus_from_shore_a",
    "shore_a_from_modulus",
]

#: Within which both relations are meant to hold (common practice, no source).
VALID_SHORE_A = (20.0, 80.0)
#: Gent's relation is said to hold within 15 to 25 %; the wider figure is used (from memory).
GENT_ACCURACY = 0.25

# Gent: E = 0.0981 (56 + 7.62336 S) / (0.137505 (254 - 2.54 S)), MPa.
_SCALE, _BASE, _RISE = 0.0981 / 0.137505, 56.0, 7.62336
_ROOM, _FALL = 254.0, 2.54
# log10 E = 0.0235 S - 0.6403, MPa.
_SLOPE, _OFFSET = 0.0235, -0.6403


@dataclass(frozen=True, slots=True, kw_only=True)
class ModulusBand:
    """Young's modulus that a Shore A hardness stands for.

    Attributes
    ----------
    shore_A : float
    gent, log : float
        By Gent's relation and by the base-10 logarithmic one, MPa.
    low, high : float
        Band that covers both, Gent's with its stated accuracy, MPa.
    in_range : bool
        False outside Shore A 20 to 80, where both are extrapolated.
    """

    shore_A: float
    gent: float
    log: float
    low: float
    high: float
    in_range: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class HardnessBand:
    """Shore A hardness that a Young's modulus stands for; see `ModulusBand`."""

    E: float
    gent: float
    log: float
    low: float
    high: float
    in_range: bool


def _hardness(shore_a: float) -> float:
    if not 0.0 < shore_a < 100.0:
        raise InputError(f"Shore A lies above 0 and below 100; got {shore_a}.", key="shore_A")
    return float(shore_a)


def modulus_by_gent(shore_a: float) -> float:
    """Young's modulus, MPa, by Gent's model of the flat-ended indenter.

    Source: A. N. Gent, "On the relation between indentation hardness and Young's modulus",
    Rubber Chem. Technol. 31 (1958) 896 (constants from memory).

    Examples
    --------
    >>> round(modulus_by_gent(50.0), 4)
    2.4558
    """
    s = _hardness(shore_a)
    return _SCALE * (_BASE + _RISE * s) / (_ROOM - _FALL * s)


def modulus_by_log(shore_a: float) -> float:
    """Young's modulus, MPa, by log10 E = 0.0235 S - 0.6403 (base 10; from memory).

    Examples
    --------
    >>> round(modulus_by_log(80.0), 1)
    17.4
    """
    return math.pow(10.0, _SLOPE * _hardness(shore_a) + _OFFSET)


def _in_range(*shore: float) -> bool:
    return all(VALID_SHORE_A[0] <= s <= VALID_SHORE_A[1] for s in shore)


def modulus_from_shore_a(shore_a: float) -> ModulusBand:
    """Young's modulus for a Shore A hardness, by both relations.

    Parameters
    ----------
    shore_a : float
        Above 0 and below 100; trustworthy from 20 to 80.

    Returns
    -------
    ModulusBand

    Raises
    ------
    InputError
        If the hardness is not a number above 0 and below 100.
    """
    gent, log = modulus_by_gent(shore_a), modulus_by_log(shore_a)
    return ModulusBand(
        shore_A=float(shore_a),
        gent=gent,
        log=log,
        low=min(gent * (1.0 - GENT_ACCURACY), log),
        high=max(gent * (1.0 + GENT_ACCURACY), log),
        in_range=_in_range(shore_a),
    )


def _shore_by_gent(modulus: float) -> float:
    return (modulus * _ROOM - _SCALE * _BASE) / (_SCALE * _RISE + modulus * _FALL)


def shore_a_from_modulus(E: float) -> HardnessBand:
    """Shore A hardness for a Young's modulus, by the inverses of both relations.

    Parameters
    ----------
    E : float
        Young's modulus, MPa.

    Returns
    -------
    HardnessBand
        `low` and `high` cover every hardness whose `ModulusBand` holds `E`, cut to 0 to 100.

    Raises
    ------
    InputError
        If the modulus is so low or so high that one of the relations has no hardness for it.
    """
    if not (E > 0 and math.isfinite(E)):
        raise InputError(f"Young's modulus must be above 0 MPa; got {E}.", key="E_MPa")
    gent, log = _shore_by_gent(E), (math.log10(E) - _OFFSET) / _SLOPE
    if not (0.0 < gent < 100.0 and 0.0 < log < 100.0):
        raise InputError(
            f"A modulus of {E} MPa has no Shore A hardness by both relations (Gent gives "
            f"{gent:.1f}, the logarithmic one {log:.1f}); Shore A spans about 0.5 to 50 MPa.",
            key="E_MPa",
        )
    soft, hard = _shore_by_gent(E / (1.0 + GENT_ACCURACY)), _shore_by_gent(E / (1 - GENT_ACCURACY))
    return HardnessBand(
        E=float(E),
        gent=gent,
        log=log,
        low=max(0.0, min(soft, log)),
        high=min(100.0, max(hard, log)),
        in_range=_in_range(gent, log),
    )

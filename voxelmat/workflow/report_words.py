"""Numbers, places, supports and loads in the words of the report."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from voxelmat.model.loadcase import (
    BodyForce,
    Force,
    Foundation,
    GroundSpring,
    InitialStrain,
    Load,
    Plate,
    Pressure,
    PressureMap,
    Support,
    Temperature,
)
from voxelmat.units import number

__all__ = ["expectation", "held_words", "load_words", "percent", "place", "plate_words"]


def percent(share: float) -> str:
    """A signed share in percent, with a true minus sign."""
    if not math.isfinite(share):
        return "not known"
    text = number(abs(100.0 * share), 2)
    return f"{'−' if share < 0 else '+'}{text} %"


def place(point: Sequence[float]) -> str:
    """The components of a place or a force; what is nothing beside the largest is 0."""
    top = max(abs(p) for p in point)
    return ", ".join(number(p if abs(p) > 1e-6 * top else 0.0) for p in point)


def held_words(support: Support) -> str:
    """What a support holds and moves."""
    texts = []
    for axis, move in zip("xyz", support.displacement, strict=True):
        if move is not None:
            texts.append(f"{axis} held" if move == 0 else f"{axis} moved {number(move)} mm")
    if any(support.rotation):
        turn = place([math.degrees(r) for r in support.rotation])
        texts.append(f"turned by {turn}° about {place(support.about)} mm")
    return ", ".join(texts)


def plate_words(plate: Plate) -> str:
    """What is given of a plate, and what acts on it."""
    texts = []
    for axis, move in zip("xyz", plate.translation, strict=True):
        if move is not None:
            texts.append(f"{axis} held" if move == 0 else f"{axis} moved {number(move)} mm")
    for axis, turn in zip("xyz", plate.rotation, strict=True):
        if turn is not None:
            degrees = number(math.degrees(turn))
            texts.append(
                f"no turn about {axis}" if turn == 0 else f"turned {degrees}° about {axis}"
            )
    if any(plate.force):
        texts.append(f"{place(plate.force)} N along x, y, z")
    if any(plate.moment):
        texts.append(f"{place(plate.moment)} N mm about x, y, z")
    return ", ".join(texts) or "moves freely as one body"


def _strain_words(load: Temperature | InitialStrain) -> tuple[str, str, str]:
    where = load.region.name if load.region is not None else "everywhere"
    if isinstance(load, InitialStrain):
        if load.strain.ndim > 1:
            return "initial strain", where, "a field of its own for every voxel"
        return "initial strain", where, f"{', '.join(number(e) for e in load.strain)} (xx to yz)"
    t = np.asarray(load.temperature)
    ends = [number(float(end(t[np.isfinite(t)]))) for end in (np.min, np.max)]
    words = " to ".join(ends if t.ndim else ends[:1])
    return "temperature", where, f"{words} °C, without stress at {number(load.stress_free)} °C"


def expectation(force: float, expected: float) -> str:
    """How a resultant compares with what the design expects, in words."""
    off = force / expected - 1
    if abs(off) < 1e-3:
        return f"as the design expects ({number(expected)} N)"
    return f"the design expects {number(expected)} N, so this is {percent(off)}"


def load_words(load: Load) -> tuple[str, str, str]:
    """Kind, where, and how much."""
    if isinstance(load, Force):
        return "force", load.region.name, f"{place(load.vector)} N along x, y, z"
    if isinstance(load, Pressure):
        return "pressure", load.region.name, f"{number(1e3 * load.pressure)} kPa"
    if isinstance(load, PressureMap):
        words = f"{number(load.resultant)} N from {load.side}, acting {load.acts}"
        if load.expected_force is not None:
            words += f"; {expectation(load.resultant, load.expected_force)}"
        return f"pressure map {load.source_file}", load.region.name, words
    if isinstance(load, BodyForce):
        where = load.region.name if load.region is not None else "everywhere"
        return "body force", where, f"{place(load.acceleration)} mm/s² along x, y, z"
    if isinstance(load, GroundSpring):
        return "spring to ground", load.region.name, f"{place(load.stiffness)} N/mm along x, y, z"
    if isinstance(load, Foundation):
        way = "along the normal" if load.acts == "normal" else "in every direction"
        return "elastic bed", load.region.name, f"{number(load.stiffness)} N/mm³ {way}"
    if isinstance(load, Temperature | InitialStrain):
        return _strain_words(load)
    raise TypeError(f"No words for a load of type {type(load).__name__}.")

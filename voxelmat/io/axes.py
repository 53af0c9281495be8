"""Axis order and direction of volume files: straight axes are turned to x, y, z; others refused."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.units import LENGTH_MM, length_factor

__all__ = ["Straight", "millimetres", "straighten"]

# A direction off an axis by more than this share of its length would move voxels visibly.
_OBLIQUE = 1e-4
_WORDS = {
    "millimeter": "mm", "millimetre": "mm", "centimeter": "cm", "centimetre": "cm",
    "meter": "m", "metre": "m", "micrometer": "um", "micrometre": "um", "micron": "um",
    "µm": "um", "μm": "um", "inch": "inch", "foot": "foot", "in": "inch", "ft": "foot",
}  # fmt: skip


def millimetres(stated: str | None, given: str | None, file: str) -> float:
    """Millimetres in the unit of a file.

    Parameters
    ----------
    stated : str or None
        What the file says; None or empty where it says nothing.
    given : str or None
        What the caller says.

    Raises
    ------
    InputError
        Where neither says it, the unit is no unit of length, or they differ.
    """
    known = ", ".join(LENGTH_MM)
    if not stated:
        if given is None:
            raise InputError(
                f"The file does not say its unit of length; give one of {known}.",
                file=file,
                key="unit",
            )
        return length_factor(given)
    word = _WORDS.get(stated.strip().lower(), stated.strip())
    if word not in LENGTH_MM:
        raise InputError(
            f"The file states the unit '{stated}', which is no unit of length that is read "
            f"({known}). Save it with another.",
            file=file,
            key="unit",
        )
    if given is not None and length_factor(given) != length_factor(word):
        raise InputError(
            f"The unit was given as '{given}', but the file states '{stated}'. Leave the unit out.",
            file=file,
            key="unit",
        )
    return length_factor(word)


@dataclass(frozen=True, slots=True, eq=False)
class Straight:
    """An array turned to ``[i, j, k]`` along x, y, z, with the low corner of its first voxel."""

    values: NDArray[Any]
    spacing: tuple[float, float, float]
    origin: tuple[float, float, float]


def straighten(
    values: NDArray[Any],
    directions: NDArray[np.float64],
    centre: NDArray[np.float64],
    file: str,
) -> Straight:
    """Turn a stored array so that its axes run along +x, +y, +z.

    Parameters
    ----------
    values : ndarray, 3-D
        In the file's own order of axes.
    directions : (3, 3) array
        Column a: the step in space, mm, from one voxel to the next along stored axis a.
    centre : (3,) array
        Centre of voxel (0, 0, 0), mm.

    Raises
    ------
    InputError
        For oblique axes, axes without length, or two along the same direction.
    """
    if not (np.isfinite(directions).all() and np.isfinite(centre).all()):
        raise InputError("The position of the voxels is not given by finite numbers.", file=file)
    main = np.abs(directions).argmax(axis=0)
    length = np.abs(directions).max(axis=0)
    if not (length > 0).all() or len(set(main.tolist())) != 3:
        raise InputError(
            "The axes of the volume do not span space: two of them run along the same direction "
            "or one has no length.",
            file=file,
        )
    rest = np.abs(directions).sum(axis=0) - length
    if (rest > _OBLIQUE * length).any():
        tilt = math.degrees(math.atan(float((rest / length).max())))
        raise InputError(
            f"The axes of the volume lie up to {tilt:.2g} degrees off x, y and z (an oblique "
            "scan). Resample it onto straight axes and export it again.",
            file=file,
        )
    order = np.argsort(main)
    turned = values.transpose(*order)
    origin, flip = [], []
    for axis in range(3):
        stored = int(order[axis])
        step = float(directions[axis, stored])
        first = float(centre[axis])
        low = first if step > 0 else first + step * (values.shape[stored] - 1)
        origin.append(low - abs(step) / 2)
        flip.append(slice(None, None, 1 if step > 0 else -1))
    h = [float(length[int(a)]) for a in order]
    return Straight(turned[tuple(flip)], (h[0], h[1], h[2]), (origin[0], origin[1], origin[2]))

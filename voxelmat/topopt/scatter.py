"""Loads that act a little elsewhere, and resins a little softer or stiffer than their records."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.design_rules import LoadScatter, MaterialScatter
from voxelmat.model.material import Material
from voxelmat.topopt.fields import Realisation
from voxelmat.topopt.physics import Case

__all__ = ["moved", "scattered_loads", "scattered_resins", "turned"]

Array = NDArray[np.float64]
Bools = NDArray[np.bool_]
Cases = tuple[Case, ...]

_NOTHING = 1e-9  # of a load: less is rounding


def turned(case: Case, axis: Array, angle: float) -> Case:
    """The case with all its forces turned about an axis by an angle in degrees."""
    a = axis / np.linalg.norm(axis)
    t = math.radians(angle)
    cross = np.array([[0, -a[2], a[1]], [a[2], 0, -a[0]], [-a[1], a[0], 0]])
    turn = np.eye(3) + math.sin(t) * cross + (1 - math.cos(t)) * cross @ cross
    return dataclasses.replace(case, force=np.tensordot(turn, case.force, 1))


def moved(
    case: Case, axis: str, offset: float, spacing: tuple[float, float, float], nodes: Bools
) -> Case:
    """The case with its load moved along an axis, shared between nodes where it falls between.

    Parameters
    ----------
    case : Case
    axis : str
    offset : float
        mm, of either sign.
    spacing : tuple of float
        mm, along x, y, z.
    nodes : ndarray of bool, (nz+1, ny+1, nx+1)
        That touch the shape.

    Raises
    ------
    InputError
        If a part of the load then acts on nothing.
    """
    along = "xyz".index(axis)
    steps = offset / spacing[along]
    whole = math.floor(steps)
    share = steps - whole
    force = (1.0 - share) * np.roll(case.force, whole, axis=3 - along)
    if share > 0:
        force = force + share * np.roll(case.force, whole + 1, axis=3 - along)
    size = float(np.abs(case.force).sum())
    off = float(np.abs(force[:, ~nodes]).sum())
    if off > _NOTHING * size or _left(case.force, whole + (share > 0), whole, 3 - along):
        raise InputError(
            f"The load of case '{case.name}' moved by {offset:g} mm along {axis} acts beside the "
            "part; lower the offset, leave that axis out, or load a smaller region."
        )
    return dataclasses.replace(case, force=force)


def _left(force: Array, most: int, least: int, axis: int) -> bool:
    """Whether a load moved by `least` to `most` nodes goes over the end of the grid."""
    used = np.flatnonzero(np.abs(force).sum(axis=tuple(a for a in range(4) if a != axis)))
    return bool(used[0] + least < 0 or used[-1] + most >= force.shape[axis])


def scattered_loads(
    scatter: LoadScatter, cases: Cases, spacing: tuple[float, float, float], nodes: Bools
) -> list[tuple[Cases, Cases]]:
    """All cases with those named off one way and the other; a pair for each way to be off.

    Raises
    ------
    InputError
        An unknown load case, or a load moved off the part.
    """
    names = [c.name for c in cases]
    for name in scatter.load_cases:
        if name not in names:
            raise InputError(f"Scatter of load case '{name}': there are {', '.join(names)}.")
    chosen = scatter.load_cases or tuple(names)

    def each(change: Callable[[Case], Case]) -> Cases:
        return tuple(change(c) if c.name in chosen else c for c in cases)

    pairs = []
    if scatter.angle > 0:
        for n in range(2 if all(_across(c.force) is not None for c in cases) else 3):
            one, other = (
                each(lambda c, n=n, a=a: turned(c, _axis(c.force, n), a))  # type: ignore[misc]
                for a in (scatter.angle, -scatter.angle)
            )
            pairs.append((one, other))
    if scatter.offset > 0:
        for axis in scatter.axes:
            one, other = (
                each(lambda c, a=axis, d=d: moved(c, a, d, spacing, nodes))  # type: ignore[misc]
                for d in (scatter.offset, -scatter.offset)
            )
            pairs.append((one, other))
    return pairs


def _across(force: Array) -> tuple[Array, Array] | None:
    """Two axes across a load; None where it pushes nowhere in all."""
    total = force.sum(axis=(1, 2, 3))
    if np.linalg.norm(total) < _NOTHING * np.abs(force).sum():
        return None
    total = total / np.linalg.norm(total)
    first = np.cross(total, np.eye(3)[np.abs(total).argmin()])
    return first, np.cross(total, first)


def _axis(force: Array, n: int) -> Array:
    """The n-th axis to turn a load about: across it, or x, y, z where it has no direction."""
    across = _across(force)
    return np.eye(3)[n] if across is None or n > 1 else across[n]


def scattered_resins(
    scatter: MaterialScatter, resins: list[Material]
) -> list[tuple[Realisation, Realisation]]:
    """The resins one standard deviation stiffer and softer, each alone or all at once.

    The modulus is taken as log-normal, Poisson's ratio as sure.

    Raises
    ------
    InputError
        If no resin's record has a range.
    """
    sigma = [0.5 * math.log(m.E.band[1] / m.E.band[0]) / scatter.band for m in resins]
    if not any(sigma):
        raise InputError(
            "Scatter of materials is asked for, but no modulus has a range in its record "
            f"({', '.join(m.name for m in resins)}); give low and high there, or leave it out."
        )
    if scatter.together:
        rows = [sigma]
    else:
        rows = [[s if n == m else 0.0 for n in range(len(sigma))] for m, s in enumerate(sigma) if s]
    return [
        (
            Realisation(stiffness=tuple(math.exp(s) for s in row)),
            Realisation(stiffness=tuple(math.exp(-s) for s in row)),
        )
        for row in rows
    ]

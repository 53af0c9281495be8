"""Stress, strain extremes and safety against each material's strength, at voxel centres.

Order of components: xx, yy, zz, xy, xz, yz; shear strain is engineering strain. The stress at
one voxel of a stepped surface is not reliable, however fine the grid; averages and the inside are.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.material import Constant
from voxelmat.model.part import Part
from voxelmat.model.result import Extreme, StaticResult

__all__ = [
    "Safety",
    "largest_principal_strain",
    "largest_rotation",
    "max_principal",
    "safety",
    "safety_field",
    "stress",
]

Double = NDArray[np.float64]

# Principal values are found for this many voxels at a time, to bound memory.
_CHUNK = 1 << 18


def stress(strain: Double, lam: Double, mu: Double) -> Double:
    """Stress in the material, MPa; strain (6, ...) and Lame constants of the last axes."""
    out = np.empty_like(strain)
    pressure = lam * (strain[0] + strain[1] + strain[2])
    for c in range(3):
        out[c] = pressure + 2.0 * mu * strain[c]
        out[c + 3] = mu * strain[c + 3]
    return out


def _tensors(values: NDArray[np.floating], shear: float) -> Double:
    """Symmetric 3x3 tensors from (n, 6); `shear` is what off-diagonal entries are multiplied by."""
    out = np.empty((len(values), 3, 3))
    for c in range(3):
        out[:, c, c] = values[:, c]
    for c, (a, b) in enumerate(((0, 1), (0, 2), (1, 2))):
        out[:, a, b] = out[:, b, a] = shear * values[:, 3 + c]
    return out


def max_principal(result: StaticResult) -> NDArray[np.float32]:
    """Largest principal stress at voxel centres, MPa, ``[i, j, k]``; 0 in empty voxels."""
    solid = result.part.solid
    values = result.stress[solid]
    out = np.empty(len(values), dtype=np.float32)
    for n in range(0, len(values), _CHUNK):
        part = _tensors(values[n : n + _CHUNK], 1.0)
        out[n : n + _CHUNK] = np.linalg.eigvalsh(part)[:, 2]
    field = np.zeros(solid.shape, dtype=np.float32, order="F")
    field[solid] = out
    return field


def _place(part: Part, cell: NDArray[np.intp]) -> tuple[float, float, float]:
    x, y, z = (float(c[n]) for c, n in zip(part.grid.centres(), cell, strict=True))
    return x, y, z


def judged(part: Part) -> NDArray[np.bool_]:
    """Voxels whose local values mean something: at least half full, or any where none is."""
    half = part.solid & (part.fill >= 0.5)
    return half if half.any() else part.solid


def largest_principal_strain(part: Part, strain: NDArray[np.floating]) -> Extreme:
    """Principal strain of largest size and its place; voxels at least half full."""
    cells = np.argwhere(judged(part))
    values = strain[tuple(cells.T)]
    # The size of the tensor bounds its largest principal value from both sides, so few remain.
    size = np.sqrt((values[:, :3] ** 2).sum(axis=1) + 0.5 * (values[:, 3:] ** 2).sum(axis=1))
    some = np.flatnonzero(size >= size.max() / np.sqrt(3.0) * (1 - 1e-6))
    best, at = 0.0, int(some[0])
    for n in range(0, len(some), _CHUNK):
        now = some[n : n + _CHUNK]
        principal = np.linalg.eigvalsh(_tensors(values[now], 0.5))
        extreme = np.where(-principal[:, 0] > principal[:, 2], principal[:, 0], principal[:, 2])
        top = int(np.argmax(np.abs(extreme)))
        if abs(extreme[top]) > abs(best):
            best, at = float(extreme[top]), int(now[top])
    return Extreme(value=best, place_mm=_place(part, cells[at]))


def largest_rotation(part: Part, u: Double) -> Extreme:
    """Largest rotation (half the curl) at voxel centres, radians; u ``[3, nz+1, ny+1, nx+1]``."""
    best, at = -1.0, np.zeros(3, dtype=np.intp)
    inside = judged(part).T
    h = part.grid.spacing
    for k in range(inside.shape[0]):
        if not inside[k].any():
            continue
        slab = u[:, k : k + 2]
        # Derivatives at the centres: mean over the other two axes, difference along one.
        z = (slab[:, 1] - slab[:, 0]) / h[2]
        z = (z[:, 1:] + z[:, :-1])[:, :, 1:] + (z[:, 1:] + z[:, :-1])[:, :, :-1]
        flat = slab[:, 0] + slab[:, 1]
        y = (flat[:, 1:] - flat[:, :-1]) / h[1]
        y = y[:, :, 1:] + y[:, :, :-1]
        x = (flat[:, :, 1:] - flat[:, :, :-1]) / h[0]
        x = x[:, 1:] + x[:, :-1]
        curl = (y[2] - z[1]) ** 2 + (z[0] - x[2]) ** 2 + (x[1] - y[0]) ** 2
        turn = np.where(inside[k], 0.125 * np.sqrt(curl), -1.0)
        top = int(np.argmax(turn))
        if turn.flat[top] > best:
            best = float(turn.flat[top])
            j, i = divmod(top, turn.shape[1])
            at = np.array([i, j, k])
    return Extreme(value=best, place_mm=_place(part, at))


@dataclass(frozen=True, slots=True, kw_only=True)
class Safety:
    """Smallest safety factor in the voxels that hold a resin.

    Attributes
    ----------
    resin : str
    factor : float
        Strength over the von Mises stress of the blend around it; below 1 it is expected to fail.
    low, high : float
        The factor with the lower and the upper end of the strength's range.
    strength : float
        At the temperature of the load case, MPa.
    indicative : bool
        The strength has no source.
    place_mm : tuple of float
    """

    resin: str
    factor: float
    low: float
    high: float
    strength: float
    indicative: bool
    place_mm: tuple[float, float, float]


def _end(strength: Constant, side: str) -> float:
    if side == "value":
        return strength.value
    return strength.band[{"low": 0, "high": 1}[side]]


def _palette_strength(part: Part, temperature_degC: float, side: str) -> Double:
    """Smallest strength among the resins of each palette entry, MPa; inf where none is known."""
    found = ((m.name, m.strength_at(temperature_degC)) for m in part.resins)
    known = {name: _end(strength, side) for name, strength in found if strength is not None}
    return np.array(
        [min((known.get(n, np.inf) for n, _ in b.fractions), default=np.inf) for b in part.palette]
    )


def safety_field(result: StaticResult, side: str = "value") -> NDArray[np.float32]:
    """Strength over von Mises stress, ``[i, j, k]``; inf where empty or no strength is known.

    A blend is judged by the weakest resin in it, at the mean stress of the blend: the droplets
    themselves see more or less than that. Strengths are those at the temperature of the load
    case, where the records say how they change with it.

    Parameters
    ----------
    result : StaticResult
    side : str
        ``"value"``, or ``"low"`` or ``"high"`` for an end of the strengths' ranges.
    """
    if side not in ("value", "low", "high"):
        raise InputError(f"The side of a range is value, low or high; got {side!r}.")
    part = result.part
    table = _palette_strength(part, result.load_case.temperature_degC, side)
    load = np.maximum(result.von_mises, 1e-30)
    return np.asarray(np.where(part.solid, table[part.labels] / load, np.inf), dtype=np.float32)


def safety(result: StaticResult) -> tuple[Safety, ...]:
    """For each resin with a strength that occurs: the smallest factor in its voxels."""
    part = result.part
    load = np.maximum(result.von_mises, 1e-30)
    inside = judged(part)
    fractions = part.palette_fractions()
    found = []
    for column, resin in enumerate(part.resins):
        strength = resin.strength_at(result.load_case.temperature_degC)
        cells = np.argwhere(inside & (fractions[:, column] > 0)[part.labels])
        if strength is None or not len(cells):
            continue
        at = cells[np.argmax(load[tuple(cells.T)])]
        low, high = strength.band
        found.append(
            Safety(
                resin=resin.name,
                factor=float(strength.value / load[tuple(at)]),
                low=float(low / load[tuple(at)]),
                high=float(high / load[tuple(at)]),
                strength=strength.value,
                indicative=strength.indicative,
                place_mm=_place(part, at),
            )
        )
    return tuple(found)

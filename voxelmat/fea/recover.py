"""Stress and strain at nodes and surfaces, recovered within one material at a time.

At voxel centres the fields of a solve are most accurate. Each voxel continues its value linearly
to its corners, with the slope to its face neighbours of the same label; a node takes the mean over
the voxels of one label round it. Inside this averages, at a surface and at an interface it
extrapolates, and never does a value cross into another blend. What is not linear in the stress
(von Mises, principal values) is worked out from the recovered stress, not averaged itself.

At a stepped surface extrapolation carries the error of the steps along: see
`voxelmat.fea.peaks`.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.stress import judged
from voxelmat.model.part import Part
from voxelmat.model.result import StaticResult

__all__ = [
    "QUANTITIES",
    "Quantity",
    "node_values",
    "quantity_named",
    "to_nodes",
    "von_mises",
    "voxel_values",
]

Floats = NDArray[np.floating]
Double = NDArray[np.float64]
Bools = NDArray[np.bool_]

# Principal values are found for this many tensors at a time, to bound memory.
_CHUNK = 1 << 18


@dataclass(frozen=True, slots=True, kw_only=True)
class Quantity:
    """Something that can be read out of a result.

    Attributes
    ----------
    unit : str
    base : str
        ``"stress"``, ``"strain"`` or ``"energy"``: what is recovered, linear in the displacement
        or the energy density itself.
    components : tuple of str
        Names along the last axis; empty for a single value.
    derive : callable
        From the recovered (n, 6) or (n, 1) to (n, components) or (n,).
    """

    unit: str
    base: str
    components: tuple[str, ...]
    derive: Callable[[Double], Double]


def _principal(values: Double, shear: float) -> Double:
    """Eigenvalues of symmetric tensors (n, 6), largest first, (n, 3)."""
    out = np.empty((len(values), 3))
    for n in range(0, len(values), _CHUNK):
        now = values[n : n + _CHUNK]
        tensor = np.empty((len(now), 3, 3))
        for c in range(3):
            tensor[:, c, c] = now[:, c]
        for c, (a, b) in enumerate(((0, 1), (0, 2), (1, 2))):
            tensor[:, a, b] = tensor[:, b, a] = shear * now[:, 3 + c]
        out[n : n + _CHUNK] = np.linalg.eigvalsh(tensor)[:, ::-1]
    return out


def von_mises(s: Double) -> Double:
    """Von Mises stress of tensors (..., 6)."""
    xx, yy, zz = s[..., 0], s[..., 1], s[..., 2]
    axial = (xx - yy) ** 2 + (yy - zz) ** 2 + (zz - xx) ** 2
    return np.asarray(np.sqrt(0.5 * axial + 3.0 * (s[..., 3:] ** 2).sum(axis=-1)))


def _stretch(e: Double) -> Double:
    """Largest principal stretch, 1 + largest principal strain: exact to first order."""
    return 1.0 + _principal(e, 0.5)[:, 0]


_SIX = ("xx", "yy", "zz", "xy", "xz", "yz")
_ONE_TWO_THREE = ("1", "2", "3")

#: What can be read out, by name.
QUANTITIES = {
    "stress": Quantity(unit="MPa", base="stress", components=_SIX, derive=lambda s: s),
    "strain": Quantity(unit="", base="strain", components=_SIX, derive=lambda e: e),
    "principal stress": Quantity(
        unit="MPa", base="stress", components=_ONE_TWO_THREE, derive=lambda s: _principal(s, 1.0)
    ),
    "principal strain": Quantity(
        unit="", base="strain", components=_ONE_TWO_THREE, derive=lambda e: _principal(e, 0.5)
    ),
    "von Mises stress": Quantity(unit="MPa", base="stress", components=(), derive=von_mises),
    "largest principal stretch": Quantity(unit="", base="strain", components=(), derive=_stretch),
    "strain energy density": Quantity(
        unit="mJ/mm3", base="energy", components=(), derive=lambda w: w[:, 0]
    ),
}


def quantity_named(name: str) -> Quantity:
    """The quantity of that name; `InputError` that lists them where there is none."""
    if name not in QUANTITIES:
        raise InputError(f"There is no quantity {name!r}; use one of {', '.join(QUANTITIES)}.")
    return QUANTITIES[name]


def base_field(result: StaticResult, quantity: Quantity) -> Floats:
    """What is recovered, at voxel centres, ``[i, j, k, c]``."""
    if quantity.base == "energy":
        return result.energy_density[..., None]
    return result.stress if quantity.base == "stress" else result.strain


def voxel_values(result: StaticResult, name: str) -> Double:
    """A quantity at voxel centres.

    Parameters
    ----------
    result : StaticResult
    name : str
        One of `QUANTITIES`.

    Returns
    -------
    ndarray of float64, shape (nx, ny, nz) or (nx, ny, nz, components)
        nan in empty voxels.
    """
    quantity = quantity_named(name)
    field, solid = base_field(result, quantity), result.part.solid
    found = quantity.derive(field[solid].astype(np.float64))
    out = np.full((*solid.shape, *found.shape[1:]), np.nan)
    out[solid] = found
    return out


def _slope(field: Double, mask: Bools, axis: int) -> Double:
    """Mean step to the neighbours along an axis that are in the mask too, a voxel."""
    f, m = np.moveaxis(field, axis, 0), np.moveaxis(mask, axis, 0)
    both = m[1:] & m[:-1]
    step = np.where(both[..., None], f[1:] - f[:-1], 0.0)
    total, count = np.zeros_like(f), np.zeros(m.shape)
    total[1:] += step
    total[:-1] += step
    count[1:] += both
    count[:-1] += both
    return np.moveaxis(total / np.maximum(count, 1.0)[..., None], 0, axis)


def to_nodes(field: Floats, mask: Bools, *, extrapolate: bool = True) -> Double:
    """Bring values of the voxels of one material to the nodes.

    Parameters
    ----------
    field : ndarray, shape (nx, ny, nz, c)
        At voxel centres.
    mask : ndarray of bool, shape (nx, ny, nz)
        The voxels of the material; others are not looked at.
    extrapolate : bool
        False takes the mean of the centres: smoother, but at a surface half a voxel too deep.

    Returns
    -------
    ndarray of float64, shape (nx+1, ny+1, nz+1, c)
        nan at nodes that touch no voxel of the mask.
    """
    values = np.where(mask[..., None], field, 0.0).astype(np.float64)
    slopes = [_slope(values, mask, axis) for axis in range(3)] if extrapolate else []
    shape = tuple(n + 1 for n in mask.shape)
    total, count = np.zeros((*shape, values.shape[3])), np.zeros(shape)
    for corner in range(8):
        bit = [corner >> axis & 1 for axis in range(3)]
        at = tuple(slice(b, b + n) for b, n in zip(bit, mask.shape, strict=True))
        here = values
        for b, slope in zip(bit, slopes, strict=False):
            here = here + (b - 0.5) * slope
        total[at] += np.where(mask[..., None], here, 0.0)
        count[at] += mask
    with np.errstate(invalid="ignore"):
        return np.asarray(total / np.where(count > 0, count, np.nan)[..., None])


def material_voxels(part: Part, label: int) -> Bools:
    """Voxels of one palette entry whose local values mean something."""
    if not 0 < label < len(part.palette):
        raise InputError(f"Label {label} is not among 1 to {len(part.palette) - 1}.")
    return np.asarray((part.labels == label) & judged(part))


def node_values(result: StaticResult, name: str, label: int, *, extrapolate: bool = True) -> Double:
    """A quantity at the nodes of one material.

    Parameters
    ----------
    result : StaticResult
    name : str
        One of `QUANTITIES`.
    label : int
        Palette entry: the blend whose voxels alone are looked at.
    extrapolate : bool
        See `to_nodes`.

    Returns
    -------
    ndarray of float64, on ``grid.node_shape``, with components last
        nan at nodes that the material does not touch.
    """
    quantity = quantity_named(name)
    mask = material_voxels(result.part, label)
    shape = result.part.grid.node_shape
    width = len(quantity.components)
    out = np.full((*shape, width) if width else shape, np.nan)
    if not mask.any():
        return out
    filled = [np.flatnonzero(mask.any(axis=tuple(b for b in range(3) if b != a))) for a in range(3)]
    box = tuple(slice(int(f[0]), int(f[-1]) + 1) for f in filled)
    nodes = tuple(slice(s.start, s.stop + 1) for s in box)
    found = to_nodes(base_field(result, quantity)[box], mask[box], extrapolate=extrapolate)
    there = np.isfinite(found[..., 0])
    target = out[nodes]
    target[there] = quantity.derive(found[there])
    return out

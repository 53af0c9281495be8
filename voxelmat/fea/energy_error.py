"""Where the grid is too coarse: energy of the gap between raw and recovered stress.

O. C. Zienkiewicz and J. Z. Zhu, Int. J. Numer. Meth. Engng 24 (1987) 337 (from memory): the stress
of the elements jumps from one to the next; the stress averaged at the nodes is better, and the
energy of the difference estimates that of the error. The average is taken within one blend, so
that the true jump at an interface does not count. The element's linear modes count as part of
its stress: a bar that bends is not called wrong. The steps of a curved outline are not seen.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.ndimage
from numpy.typing import NDArray

from voxelmat.fea.element import Spacing, coefficients
from voxelmat.fea.stress import judged
from voxelmat.model.result import StaticResult

__all__ = ["EnergyError", "energy_error"]

Double = NDArray[np.float64]
Bools = NDArray[np.bool_]

# Voxels that are worked on at a time, to bound memory.
_CHUNK = 1 << 17
# Shear component of the stress by its two axes.
_SHEAR = {(0, 1): 3, (0, 2): 4, (1, 2): 5}


def _signs(corner: int) -> tuple[int, int, int]:
    x, y, z = (2 * (corner >> axis & 1) - 1 for axis in range(3))
    return x, y, z


def _places(shape: tuple[int, ...]) -> list[tuple[slice, ...]]:
    """Where the eight corners of all voxels lie among the nodes."""
    return [tuple(slice(c >> a & 1, (c >> a & 1) + shape[a]) for a in range(3)) for c in range(8)]


def _mode(u: Double, pair: tuple[int, int]) -> Double:
    """Mode of the corner values ``[i, j, k, 3]`` that varies along two axes."""
    shape = tuple(n - 1 for n in u.shape[:3])
    out = np.zeros((*shape, 3))
    for corner, at in enumerate(_places(shape)):
        sign = _signs(corner)
        out += 0.125 * sign[pair[0]] * sign[pair[1]] * u[at]
    return out


def _slopes(u: Double, lam: Double, mu: Double, h: Spacing, element: str) -> list[Double]:
    """Half the change of stress from face to face along x, y, z, each ``[i, j, k, 6]``."""
    _, _, linear, _ = coefficients(lam, mu, element)
    modes = {pair: _mode(u, pair) for pair in _SHEAR}
    out = []
    for v in range(3):
        a, b = (d for d in range(3) if d != v)
        with_a, with_b = modes[min(v, a), max(v, a)], modes[min(v, b), max(v, b)]
        ea, eb = 2 / h[a] * with_a[..., a], 2 / h[b] * with_b[..., b]
        stress = np.zeros((*lam.shape, 6))
        stress[..., a] = (linear + 2 * mu) * ea + linear * eb
        stress[..., b] = (linear + 2 * mu) * eb + linear * ea
        stress[..., _SHEAR[a, b]] = mu * (2 / h[b] * with_b[..., a] + 2 / h[a] * with_a[..., b])
        out.append(stress)
    return out


def _gap_to_nodes(corners: list[Double], mask: Bools) -> None:
    """Turn corner values of the voxels of `mask` into their gap to the mean at each node."""
    shape = tuple(n + 1 for n in mask.shape)
    total, count = np.zeros((*shape, 6)), np.zeros((*shape, 1))
    places = _places(mask.shape)
    for at, values in zip(places, corners, strict=True):
        total[at] += np.where(mask[..., None], values, 0.0)
        count[at] += mask[..., None]
    total /= np.maximum(count, 1.0)
    for at, values in zip(places, corners, strict=True):
        values -= np.where(mask[..., None], total[at], 0.0)


def _energy(s: Double, lam: Double, mu: Double) -> Double:
    """Elastic energy density of a stress, mJ/mm^3."""
    square = (s[..., :3] ** 2).sum(axis=-1) + 2.0 * (s[..., 3:] ** 2).sum(axis=-1)
    trace = s[..., :3].sum(axis=-1)
    return np.asarray((square - lam / (3 * lam + 2 * mu) * trace**2) / (4 * mu))


def _mean_energy(corners: list[Double], lam: Double, mu: Double) -> Double:
    """Mean over each voxel of the energy of a stress that is trilinear between its corners."""
    out = np.zeros(lam.shape)
    for mode in range(8):
        axes = [axis for axis in range(3) if mode >> axis & 1]
        value = np.zeros_like(corners[0])
        for corner, values in enumerate(corners):
            value += 0.125 * np.prod([_signs(corner)[axis] for axis in axes]) * values
        out += _energy(value, lam, mu) / 3.0 ** len(axes)
    return out


def _slab(result: StaticResult, lam: Double, mu: Double, low: int, high: int) -> Double:
    """Error density of the voxels from `low` to `high` along x."""
    part = result.part
    first, last = max(low - 1, 0), min(high + 1, part.grid.shape[0])
    labels = np.where(part.solid[first:last], part.labels[first:last], 0)
    lam, mu = lam[labels], mu[labels]
    u = result.displacement[first : last + 1]
    slopes = _slopes(u, lam, mu, part.grid.spacing, result.element)
    corners = []
    for corner in range(8):
        value = result.stress[first:last].astype(np.float64)
        for sign, slope in zip(_signs(corner), slopes, strict=True):
            value += sign * slope
        corners.append(value)
    for label, box in enumerate(scipy.ndimage.find_objects(labels.astype(np.int32)), start=1):
        if box is not None:
            _gap_to_nodes([c[box] for c in corners], labels[box] == label)
    stiff = np.where(mu > 0, mu, 1.0)
    density = np.where(mu > 0, _mean_energy(corners, lam, stiff), 0.0)
    return np.asarray(density[low - first : density.shape[0] - (last - high)])


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class EnergyError:
    """Estimated energy of the error by the voxel size.

    Attributes
    ----------
    share : float
        Of the strain energy; an estimate, found to be 0.5 to 1.5 times the true one on beams.
    density : ndarray of float32, shape (nx, ny, nz)
        mJ/mm^3 in the material: where finer voxels would help.
    place_mm : tuple of float
        Where it is largest.
    """

    share: float
    density: NDArray[np.float32]
    place_mm: tuple[float, float, float]


def energy_error(result: StaticResult) -> EnergyError:
    """Estimate the energy of the error of a result from its own stress, without another solve.

    Returns
    -------
    EnergyError
        0 for stress that the elements hold exactly: constant, or linear by bending.
    """
    part = result.part
    lam, mu = part.palette_lame()
    nx, ny, nz = part.grid.shape
    density = np.zeros(part.grid.shape, dtype=np.float32, order="F")
    step = max(1, _CHUNK // (ny * nz))
    for low in range(0, nx, step):
        high = min(low + step, nx)
        density[low:high] = _slab(result, lam, mu, low, high)
    total = float((density * part.fill).sum(dtype=np.float64)) * part.grid.voxel_volume
    top = np.unravel_index(int(np.argmax(density * judged(part))), density.shape)
    x, y, z = (float(c[n]) for c, n in zip(part.grid.centres(), top, strict=True))
    return EnergyError(
        share=total / result.energy if result.energy > 0 else 0.0,
        density=density,
        place_mm=(x, y, z),
    )

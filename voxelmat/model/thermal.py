"""Conductivity and heat capacity of the blends of a palette.

Units: 1 W/(m K) = 1 mW/(mm K) = 1 N/(s K), so conductivity needs no factor. 1 J/(kg K) =
1e6 mJ/(tonne K) = 1e6 N mm/(tonne K); with the density in tonne/mm^3 the capacity of a volume
comes out in mJ/(mm^3 K).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.part import Part

__all__ = [
    "conductivity_slopes",
    "mixed_conductivity",
    "palette_capacity",
    "palette_conductivity",
]

Floats = NDArray[np.float64]

#: mJ/(tonne K) in 1 J/(kg K).
_CAPACITY = 1e6
# Halvings of the interval between the two plainest bounds: to the last digit of a double.
_HALVINGS = 60


def mixed_conductivity(fractions: Floats, conductivity: Floats) -> Floats:
    """Conductivity of halftoned blends by the self-consistent (effective medium) average.

    Every resin counts as spheres in a medium that has the blend's own conductivity k,
    ``sum_m w_m (k_m - k) / (k_m + 2 k) = 0``: no resin is the matrix, as in a halftone. The value
    lies within the bounds of Hashin & Shtrikman (1962). Source: D. A. G. Bruggeman, Annalen der
    Physik 416 (1935) 636; R. Landauer, J. Appl. Phys. 23 (1952) 779 (both from memory).

    Parameters
    ----------
    fractions : ndarray, shape (n, K)
        By volume, each row summing to 1.
    conductivity : ndarray, shape (K,)
        > 0, any one unit.

    Returns
    -------
    ndarray, shape (n,)
    """
    low = 1.0 / (fractions @ (1.0 / conductivity))
    high = fractions @ conductivity
    for _ in range(_HALVINGS):
        middle = 0.5 * (low + high)
        balance = np.zeros(len(fractions))
        for m, k in enumerate(conductivity):
            balance += fractions[:, m] * (k - middle) / (k + 2.0 * middle)
        low, high = np.where(balance > 0, middle, low), np.where(balance > 0, high, middle)
    return np.asarray(0.5 * (low + high))


def conductivity_slopes(fractions: Floats, conductivity: Floats, mixed: Floats) -> Floats:
    """Slopes of `mixed_conductivity` by each fraction with the others held.

    They hold for changes that keep the sum of the fractions; off it the balance that defines the
    average is taken as it stands.

    Parameters
    ----------
    fractions : ndarray, shape (n, K)
    conductivity : ndarray, shape (K,)
    mixed : ndarray, shape (n,)
        `mixed_conductivity` of these.

    Returns
    -------
    ndarray, shape (n, K)
    """
    k = mixed[:, None]
    below = (fractions * 3.0 * conductivity / (conductivity + 2.0 * k) ** 2).sum(axis=1)
    return np.asarray((conductivity - k) / (conductivity + 2.0 * k) / below[:, None])


def _values(part: Part, field: str, what: str, key: str) -> Floats:
    """One constant of each resin; 1 for resins that no solid voxel holds."""
    labels = np.unique(part.labels[part.solid])
    used = np.max(part.palette_fractions()[labels], axis=0, initial=0.0) > 0
    found = [
        getattr(m, field) if u else None for m, u in zip(part.resins, used.tolist(), strict=True)
    ]
    missing = [
        m.name for m, u, c in zip(part.resins, used.tolist(), found, strict=True) if u and c is None
    ]
    if missing:
        raise InputError(
            f"There is no {what} for {', '.join(repr(n) for n in missing)}. State {key} in the "
            f"material's file, or give the material a `{field}`."
        )
    return np.array([1.0 if c is None else c.value for c in found])


def palette_conductivity(part: Part) -> Floats:
    """Conductivity of each palette entry, mW/(mm K); 0 for empty space.

    Raises
    ------
    InputError
        Where a resin that the part holds has no conductivity; the message names it.
    """
    out = np.zeros(len(part.palette))
    values = _values(part, "conductivity", "conductivity", "conductivity_W_per_m_K")
    if len(part.palette) > 1:
        out[1:] = mixed_conductivity(part.palette_fractions()[1:], values)
    return out


def palette_capacity(part: Part) -> Floats:
    """Heat capacity a volume of each palette entry, mJ/(mm^3 K); 0 for empty space.

    The heat of a blend is that of its masses (exact: heat is additive).

    Raises
    ------
    InputError
        Where a resin that the part holds has no heat capacity; the message names it.
    """
    values = _values(part, "heat_capacity", "heat capacity", "heat_capacity_J_per_kg_K")
    density = np.array([m.density.value for m in part.resins])
    return np.asarray(part.palette_fractions() @ (density * values * _CAPACITY))

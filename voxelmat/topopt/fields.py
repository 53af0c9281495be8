"""What a design is made of: its resins, what may be designed where, and its physical fields."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.model.laws import BlendLaw, LawValue

__all__ = ["NOMINAL", "Choice", "Draft", "Fields", "Palette", "Realisation"]

Array = NDArray[np.float64]
Bools = NDArray[np.bool_]
Numbers = NDArray[np.intp]


@dataclass(frozen=True, slots=True, kw_only=True)
class Palette:
    """The resins to choose from: bulk, shear (MPa), density (tonne/mm^3), each (K,)."""

    names: tuple[str, ...]
    bulk: Array
    shear: Array
    density: Array
    law: BlendLaw


@dataclass(frozen=True, slots=True, kw_only=True)
class Choice:
    """What may be designed where; all arrays (nz, ny, nx).

    Attributes
    ----------
    domain : ndarray of bool
        Voxels that are designed (of the shape, and not kept).
    solid, empty : ndarray of bool
        Frozen voxels of the domain.
    resin : ndarray of int
        Frozen resin number, -1 where the blend is free.
    fill : ndarray of float
        Solid fraction of each voxel by the shape's outline: scales stiffness and volume.
    kept_lam, kept_mu : ndarray of float
        Lame constants outside the domain, MPa, with the fill in them.
    mirrors : tuple of int
        Axes (0 = z, 1 = y, 2 = x) of mirror symmetry, about the middle of the shape's box.
    group : ndarray of int or None
        Voxels of one number are alike (extruded, repeated); see `voxelmat.topopt.links`.
    zones : ndarray of int or None
        Voxels of one number have one blend.
    periodic : bool
        The design is one cell of many, so filters go on across the faces of the grid.
    """

    domain: Bools
    solid: Bools
    empty: Bools
    resin: Numbers
    fill: Array
    kept_lam: Array
    kept_mu: Array
    mirrors: tuple[int, ...] = ()
    group: Numbers | None = None
    zones: Numbers | None = None
    periodic: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class Realisation:
    """One way in which a design may come out.

    Attributes
    ----------
    threshold : float
        Added to that of the density's projection: above 0 erodes, below 0 dilates.
    bias : tuple of float, or empty
        Log odds that each resin gains at borders between resins.
    stiffness : tuple of float, or empty
        Factor on both moduli of each resin.
    """

    threshold: float = 0.0
    bias: tuple[float, ...] = ()
    stiffness: tuple[float, ...] = ()


NOMINAL = Realisation()


@dataclass(slots=True, kw_only=True)
class Draft:
    """A design while its kinds of unknowns make it, one after the other.

    Attributes
    ----------
    realisation : Realisation
    sharpness : float
        Of all projections.
    rho, filtered : ndarray, (nz, ny, nx)
        How solid, 0 to 1, 0 outside the domain; and before the projection, frozen voxels at 0
        or 1.
    w : ndarray, (K, nz, ny, nx)
        Fractions that sum to 1 in the domain; 0 outside.
    bulk, shear : ndarray, (voxels of the domain,)
        Of the solid there, MPa.
    lam, mu : ndarray, (voxels of the domain,)
        Lame constants with voids, MPa.
    memory : dict
        What a kind needs on the way back, by its name.
    """

    realisation: Realisation = NOMINAL
    sharpness: float = 0.0
    rho: Array = field(default_factory=lambda: np.empty(0))
    filtered: Array = field(default_factory=lambda: np.empty(0))
    w: Array = field(default_factory=lambda: np.empty(0))
    bulk: Array = field(default_factory=lambda: np.empty(0))
    shear: Array = field(default_factory=lambda: np.empty(0))
    lam: Array = field(default_factory=lambda: np.empty(0))
    mu: Array = field(default_factory=lambda: np.empty(0))
    memory: dict[str, Any] = field(default_factory=dict)


@dataclass(frozen=True, slots=True, kw_only=True)
class Fields:
    """Physical fields of one design, (nz, ny, nx), and what the way back needs.

    Attributes
    ----------
    lam, mu : ndarray
        Lame constants everywhere, MPa, fill included.
    rho : ndarray
        How solid, 0 to 1; 0 outside the domain.
    w : ndarray, (K, nz, ny, nx)
        Fractions that sum to 1 in the domain; 0 outside.
    filtered : ndarray
        Density before projection, frozen voxels at 0 or 1.
    blend : LawValue
        Of the voxels of the domain.
    draft : Draft
    """

    lam: Array
    mu: Array
    rho: Array
    w: Array
    filtered: Array
    blend: LawValue
    draft: Draft

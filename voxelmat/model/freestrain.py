"""Strain that a part would take without stress: thermal, residual or programmed."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from voxelmat.errors import InputError
from voxelmat.model.region import Region

__all__ = ["InitialStrain", "Temperature"]


def _frozen(values: ArrayLike, what: str) -> NDArray[np.float64]:
    out = np.array(values, dtype=np.float64)
    if not np.all(np.isfinite(out)):
        raise InputError(
            f"{what} must be finite; {int((~np.isfinite(out)).sum())} of {out.size} numbers are "
            f"not. Give empty space any number, such as the stress-free temperature."
        )
    out.flags.writeable = False
    return out


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Temperature:
    """The temperature of a part, which expands by it from a stress-free temperature.

    Attributes
    ----------
    temperature : float or ndarray
        degC: one number; at voxel centres, shape (nx, ny, nz), for example from
        `HeatResult.at_voxels`; or at nodes, shape (nx+1, ny+1, nz+1), with which the linear
        course within each voxel acts too. nan is allowed at nodes that touch no material.
    stress_free : float
        degC at which the part has its drawn shape without stress.
    region : Region or None
        Only its voxels expand; None takes the whole part.
    """

    temperature: float | NDArray[np.float64]
    stress_free: float = 23.0
    region: Region | None = None

    def __post_init__(self) -> None:
        if not math.isfinite(self.stress_free):
            raise InputError(f"The stress-free temperature must be finite; got {self.stress_free}.")
        given: Any = self.temperature
        if np.ndim(given) == 0:
            object.__setattr__(self, "temperature", float(_frozen(given, "A temperature (degC)")))
            return
        if np.ndim(given) != 3:
            raise InputError(
                "A temperature is one number (degC), or an array at voxels or at nodes, indexed "
                f"[i, j, k]; got shape {np.shape(given)}."
            )
        values = np.array(given, dtype=np.float64)
        if np.any(np.isinf(values)):
            raise InputError("A temperature field holds infinite values.")
        values.flags.writeable = False
        object.__setattr__(self, "temperature", values)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class InitialStrain:
    """A strain that voxels would take if they were free: residual or programmed.

    Attributes
    ----------
    strain : ndarray of float64
        xx, yy, zz, xy, xz, yz, shear as engineering strain: shape (6,), the same in all voxels;
        or (nx, ny, nz, 6).
    region : Region or None
        Only its voxels; None takes the whole part.
    """

    strain: NDArray[np.float64]
    region: Region | None = None

    def __post_init__(self) -> None:
        values = _frozen(self.strain, "An initial strain")
        if values.shape[-1:] != (6,) or values.ndim not in (1, 4):
            raise InputError(
                "An initial strain has six components xx, yy, zz, xy, xz, yz, for all voxels or "
                f"for each, shape (6,) or (nx, ny, nz, 6); got shape {values.shape}."
            )
        object.__setattr__(self, "strain", values)

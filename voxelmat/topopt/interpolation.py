"""From how solid a voxel is to its moduli, with derivatives."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

__all__ = ["VoidLaw"]

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class VoidLaw:
    """Moduli of a voxel that is only partly solid; makes half-solid a bad bargain.

    ``bounded``: G = rho^p G_s and K = rho^p / (1 / K_s + 3 (1 - rho) / (4 G_s)), which stays
    within the Hashin-Shtrikman upper bound of a porous solid also where K_s >> G_s; a plain
    rho^3 breaks that bound for rubbery resins. ``plain``: both are scaled by rho^p.

    Attributes
    ----------
    penalty : float
        p.
    kind : str
    floor_shear, floor_lame : float
        What is left of mu and lambda in empty voxels, MPa.
    """

    penalty: float
    kind: Literal["bounded", "plain"]
    floor_shear: float
    floor_lame: float

    def forward(self, rho: Array, bulk: Array, shear: Array) -> tuple[Array, Array]:
        """Lame constants lambda and mu, MPa; all arrays of one shape."""
        scale = rho**self.penalty
        if self.kind == "bounded":
            k = scale / (1.0 / bulk + 0.75 * (1.0 - rho) / shear)
        else:
            k = scale * bulk
        g = scale * shear
        return k - 2.0 * g / 3.0 + self.floor_lame, g + self.floor_shear

    def transpose(
        self, rho: Array, bulk: Array, shear: Array, c_lam: Array, c_mu: Array
    ) -> tuple[Array, Array, Array]:
        """Cotangents of lambda and mu to those of rho, bulk and shear modulus."""
        c_k, c_g = c_lam, c_mu - 2.0 / 3.0 * c_lam
        p = self.penalty
        scale = rho**p
        slope = p * rho ** (p - 1.0)
        if self.kind == "plain":
            return c_k * slope * bulk + c_g * slope * shear, c_k * scale, c_g * scale
        resist = 1.0 / bulk + 0.75 * (1.0 - rho) / shear
        k_by_resist = -scale / resist**2
        c_rho = c_k * (slope / resist - k_by_resist * 0.75 / shear) + c_g * slope * shear
        c_bulk = -c_k * k_by_resist / bulk**2
        c_shear = -c_k * k_by_resist * 0.75 * (1.0 - rho) / shear**2 + c_g * scale
        return c_rho, c_bulk, c_shear

"""What a halftoned blend is computed to be: values by refinement, their limit, and its bounds."""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass, field
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.blend import Blend

__all__ = ["BlendEstimate", "Limit", "limit"]

Floats = NDArray[np.float64]

# Orders of convergence that a fit may have: corners of droplets lower it below 1, smooth
# inclusions bring it to 2.
_ORDERS = (0.5, 2.0)
# Share of the extrapolated step that stays uncertain whatever the fit says.
_SHARE = 0.25


class Limit(NamedTuple):
    """Value at element size 0, MPa; how far it may be off; the order that it was found with."""

    value: float
    uncertainty: float
    order: float


def _at_order(h: Floats, v: Floats, order: float) -> float:
    """Limit of the straight line through the last two values over h^order."""
    a, b = h[-2] ** order, h[-1] ** order
    return float(v[-1] + (v[-1] - v[-2]) * b / (a - b))


def _fitted_order(h: Floats, v: Floats) -> float:
    """Order with which the last three values fit ``v0 + c h^p``, kept within `_ORDERS`."""
    with np.errstate(divide="ignore", invalid="ignore"):
        wanted = (v[-3] - v[-2]) / (v[-2] - v[-1])
    if not np.isfinite(wanted):
        return 1.0
    low, high = _ORDERS
    for _ in range(60):
        p = 0.5 * (low + high)
        ratio = (h[-3] ** p - h[-2] ** p) / (h[-2] ** p - h[-1] ** p)
        low, high = (p, high) if ratio < wanted else (low, p)
    return 0.5 * (low + high)


def limit(h: Floats, v: Floats) -> Limit:
    """Extrapolate values at element sizes `h`, coarse to fine, to size 0.

    With three or more values the order is fitted to the last three, with two it is 1. The
    uncertainty is the larger of the distance to the limit of first order and a quarter of the
    step from the finest value.

    Raises
    ------
    InputError
        With fewer than two values or sizes that do not fall.
    """
    h, v = np.asarray(h, dtype=np.float64), np.asarray(v, dtype=np.float64)
    if len(h) < 2 or len(h) != len(v) or np.any(np.diff(h) >= 0):
        raise InputError(f"Extrapolation takes two or more falling element sizes; got {h}.")
    order = _fitted_order(h, v) if len(h) > 2 else 1.0
    value = _at_order(h, v, order)
    first = _at_order(h, v, 1.0)
    spread = _SHARE * abs(value - float(v[-1])) if len(h) > 2 else abs(value - float(v[-1]))
    return Limit(value, max(abs(value - first), spread), order)


@dataclass(frozen=True, slots=True, kw_only=True)
class BlendEstimate:
    """Moduli of a dithered cell.

    Attributes
    ----------
    blend : Blend
        As asked for.
    placed : Blend
        Fractions that the cell really has.
    sites : int
        Droplets along each side of the cell.
    refinements : tuple of int
        Elements a droplet along each axis.
    bulk, shear : tuple of float
        Voigt averages at each refinement (those of the nearest isotropic stiffness), MPa.
    distance : tuple of float
        From isotropy, of each refinement's stiffness.
    bulk_limit, shear_limit : Limit
        Extrapolated to element size 0.
    bulk_range, shear_range : tuple of float
        Hashin-Shtrikman bounds at the fractions of the cell, MPa.
    iterations : tuple of int
        All six load cases together, by refinement.
    element : str
    cautions : tuple of str
    """

    blend: Blend
    placed: Blend
    sites: int
    refinements: tuple[int, ...]
    bulk: tuple[float, ...]
    shear: tuple[float, ...]
    distance: tuple[float, ...]
    bulk_limit: Limit
    shear_limit: Limit
    bulk_range: tuple[float, float]
    shear_range: tuple[float, float]
    iterations: tuple[int, ...]
    element: str
    cautions: tuple[str, ...] = field(default=())

    @property
    def raw_held(self) -> tuple[bool, ...]:
        """For each refinement: do both moduli lie within their bounds?"""
        (k0, k1), (g0, g1) = self.bulk_range, self.shear_range
        pairs = zip(self.bulk, self.shear, strict=True)
        return tuple(k0 <= k <= k1 and g0 <= g <= g1 for k, g in pairs)

    @property
    def held(self) -> bool:
        """Whether the extrapolated moduli lie within their bounds, give or take what is unsure."""
        ok = True
        for v, (low, high) in (
            (self.bulk_limit, self.bulk_range),
            (self.shear_limit, self.shear_range),
        ):
            ok &= low - v.uncertainty <= v.value <= high + v.uncertainty
        return ok

    @property
    def young(self) -> float:
        """Young's modulus of the extrapolated moduli, MPa.

        Raises
        ------
        InputError
            Where the bounds did not hold.
        """
        if not self.held:
            raise InputError(
                f"The extrapolated moduli (K {self.bulk_limit.value:.4g}, G "
                f"{self.shear_limit.value:.4g} MPa) lie outside the Hashin-Shtrikman bounds, so "
                f"they are no answer. Use finer refinements or a larger cell."
            )
        k, g = self.bulk_limit.value, self.shear_limit.value
        return 9.0 * k * g / (3.0 * k + g)

    def replace(self, **changes: Any) -> BlendEstimate:
        """A copy with `changes`."""
        return dataclasses.replace(self, **changes)

    def _repr_html_(self) -> str:
        from voxelmat.model.html_effective import blend_table

        return blend_table(self)

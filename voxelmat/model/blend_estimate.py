"""What a halftoned blend is computed to be: values by refinement, their limit, and its bounds."""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.blend import Blend

__all__ = ["BlendEstimate", "Limit", "limit"]

Floats = NDArray[np.float64]

# Orders of convergence that are thought possible: 2 for smooth fields, less where droplets of
# high contrast meet along an edge. (Four such edges in a plane, as on a chessboard, go lower.)
_ORDERS = (0.5, 2.0)
# Relative room for rounding at bounds that meet, as they do for equal shear moduli.
_ROUNDING = 1e-9


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


def limit(elements: Sequence[int], values: Sequence[float]) -> Limit:
    """Extrapolate values found with rising numbers of elements a droplet to element size 0.

    One element a droplet lies outside any order of convergence and is left out where two others
    are there. The order is fitted to the last three values, and is 1 where there are two. The
    uncertainty reaches as far as the limits that the orders 0.5 and 2 would give.

    Raises
    ------
    InputError
        With fewer than two values or numbers that do not rise.
    """
    if len(elements) < 2 or len(elements) != len(values) or np.any(np.diff(elements) <= 0):
        raise InputError(f"Extrapolation takes two or more rising refinements; got {elements}.")
    used = slice(1, None) if elements[0] == 1 and len(elements) > 2 else slice(None)
    h, v = 1.0 / np.asarray(elements[used], dtype=np.float64), np.asarray(values[used])
    order = _fitted_order(h, v) if len(h) > 2 else 1.0
    value = _at_order(h, v, order)
    return Limit(value, max(abs(value - _at_order(h, v, p)) for p in _ORDERS), order)


def _within(value: float, uncertainty: float, band: tuple[float, float]) -> bool:
    room = uncertainty + _ROUNDING * abs(value)
    return band[0] - room <= value <= band[1] + room


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
        pairs = zip(self.bulk, self.shear, strict=True)
        return tuple(
            _within(k, 0.0, self.bulk_range) and _within(g, 0.0, self.shear_range) for k, g in pairs
        )

    @property
    def held(self) -> bool:
        """Whether the extrapolated moduli lie within their bounds, give or take what is unsure."""
        both = ((self.bulk_limit, self.bulk_range), (self.shear_limit, self.shear_range))
        return all(_within(v.value, v.uncertainty, band) for v, band in both)

    @property
    def moduli(self) -> tuple[float, float]:
        """Bulk and shear modulus, MPa: the limits, moved to a bound that they pass.

        Raises
        ------
        InputError
            Where a limit passes a bound by more than its uncertainty.
        """
        if not self.held:
            raise InputError(
                f"The extrapolated moduli (K {self.bulk_limit.value:.4g}, G "
                f"{self.shear_limit.value:.4g} MPa) lie outside the Hashin-Shtrikman bounds, so "
                f"they are no answer. Use finer refinements or a larger cell."
            )
        bulk = min(max(self.bulk_limit.value, self.bulk_range[0]), self.bulk_range[1])
        return bulk, min(max(self.shear_limit.value, self.shear_range[0]), self.shear_range[1])

    @property
    def young(self) -> float:
        """Young's modulus from `moduli`, MPa."""
        k, g = self.moduli
        return 9.0 * k * g / (3.0 * k + g)

    @property
    def poisson(self) -> float:
        """Poisson's ratio from `moduli`."""
        k, g = self.moduli
        return (3.0 * k - 2.0 * g) / (2.0 * (3.0 * k + g))

    def replace(self, **changes: Any) -> BlendEstimate:
        """A copy with `changes`."""
        return dataclasses.replace(self, **changes)

    def _repr_html_(self) -> str:
        from voxelmat.model.html_effective import blend_table

        return blend_table(self)

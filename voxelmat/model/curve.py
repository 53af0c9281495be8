"""Monotone curves through knots, and the calibrated stiffness of blends of one pair of resins."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.material import INDICATIVE

__all__ = ["SIDES", "PairCurve", "monotone"]

Floats = NDArray[np.float64]

#: Which line of a curve is meant: its value, or the low or high edge of its band.
SIDES = ("value", "low", "high")


def _end_slope(h0: float, h1: float, d0: float, d1: float) -> float:
    """One-sided three-point slope at an end, limited so that the curve stays monotone."""
    slope = ((2.0 * h0 + h1) * d0 - h0 * d1) / (h0 + h1)
    if slope * d0 <= 0:
        return 0.0
    if d0 * d1 <= 0 and abs(slope) > 3.0 * abs(d0):
        return 3.0 * d0
    return slope


@lru_cache(maxsize=64)
def _coefficients(x: tuple[float, ...], y: tuple[float, ...]) -> tuple[Floats, Floats]:
    """Knots and the cubic of each interval, shape (intervals, 4), lowest power first."""
    knots = np.array(x)
    h = np.diff(knots)
    secant = np.diff(np.array(y)) / h
    slope = np.empty(len(x))
    if len(x) == 2:
        slope[:] = secant[0]
    else:
        slope[0] = _end_slope(h[0], h[1], secant[0], secant[1])
        slope[-1] = _end_slope(h[-1], h[-2], secant[-1], secant[-2])
        same = secant[:-1] * secant[1:] > 0
        w0, w1 = 2.0 * h[1:] + h[:-1], h[1:] + 2.0 * h[:-1]
        with np.errstate(divide="ignore", invalid="ignore"):
            mean = (w0 + w1) / (w0 / secant[:-1] + w1 / secant[1:])
        slope[1:-1] = np.where(same, mean, 0.0)
    table = np.empty((len(h), 4))
    table[:, 0] = y[:-1]
    table[:, 1] = slope[:-1]
    table[:, 2] = (3.0 * secant - 2.0 * slope[:-1] - slope[1:]) / h
    table[:, 3] = (slope[:-1] + slope[1:] - 2.0 * secant) / h**2
    return knots, table


def monotone(x: tuple[float, ...], y: tuple[float, ...], t: Floats) -> tuple[Floats, Floats]:
    """Piecewise cubic through the knots that rises and falls only where they do.

    Parameters
    ----------
    x, y : tuple of float
        Knots, x rising, at least two.
    t : ndarray
        Where; held at the first and last knot outside.

    Returns
    -------
    value, slope : ndarray
        Shaped as `t`; once continuously differentiable.

    Notes
    -----
    Slopes at knots by the weighted harmonic mean of F. N. Fritsch & J. Butland, SIAM J. Sci.
    Stat. Comput. 5 (1984) 300.
    """
    knots, table = _coefficients(x, y)
    held = np.clip(t, knots[0], knots[-1])
    cell = np.searchsorted(knots[1:-1], held, side="right")
    s = held - knots[cell]
    c = table[cell]
    value = c[..., 0] + s * (c[..., 1] + s * (c[..., 2] + s * c[..., 3]))
    slope = c[..., 1] + s * (2.0 * c[..., 2] + 3.0 * s * c[..., 3])
    return value, slope


@dataclass(frozen=True, slots=True, kw_only=True)
class PairCurve:
    """Young's modulus of blends of two resins against the fraction of the second.

    Attributes
    ----------
    first, second : str
        Resin names; fraction 0 is pure `first`, 1 is pure `second`.
    fraction : tuple of float
        Volume fraction of `second` at the knots, from 0 to 1, rising.
    E, E_low, E_high : tuple of float
        Modulus and its band at the knots, MPa. `E` rises or falls all the way. At the two ends
        the resins' own ranges apply, so there all three agree.
    nu : tuple of float
        Poisson's ratio at the knots, or empty for log mixing of 1 - 2 nu.
    source : str
    temperature_degC : float
    rate_per_s : float or None
    notes : str

    Raises
    ------
    InputError
        If knots, values or the band are not as said above.
    """

    first: str
    second: str
    fraction: tuple[float, ...]
    E: tuple[float, ...]
    E_low: tuple[float, ...]
    E_high: tuple[float, ...]
    nu: tuple[float, ...] = ()
    source: str = INDICATIVE
    temperature_degC: float = 23.0
    rate_per_s: float | None = None
    notes: str = ""

    def __post_init__(self) -> None:
        if self.first == self.second:
            raise InputError(f"A blend curve joins two resins; got '{self.first}' twice.")
        f = self.fraction
        rising = all(a < b for a, b in pairwise(f))
        if len(f) < 2 or f[0] != 0.0 or f[-1] != 1.0 or not rising:
            raise self._bad("fraction", f"rises from 0 to 1 in at least two knots; got {list(f)}")
        for key, values in (("E_MPa", self.E), ("low", self.E_low), ("high", self.E_high)):
            if len(values) != len(f):
                raise self._bad(key, f"has one value a knot, {len(f)}; got {len(values)}")
            if not all(v > 0 and math.isfinite(v) for v in values):
                raise self._bad(key, f"is positive and finite, in MPa; got {list(values)}")
            step = [b - a for a, b in pairwise(values)]
            if not (all(d > 0 for d in step) or all(d < 0 for d in step)):
                raise self._bad(key, f"rises (or falls) from knot to knot; got {list(values)}")
        for low, mid, high in zip(self.E_low, self.E, self.E_high, strict=True):
            if not low <= mid <= high:
                raise self._bad("low", f"<= E_MPa <= high at each knot; got {low}, {mid}, {high}")
        if not self.E_low[0] == self.E[0] == self.E_high[0] or not (
            self.E_low[-1] == self.E[-1] == self.E_high[-1]
        ):
            raise self._bad("low", "and high equal E_MPa at fraction 0 and 1 (resins have ranges)")
        if self.nu and (len(self.nu) != len(f) or not all(0 <= v < 0.5 for v in self.nu)):
            raise self._bad("nu", f"has one value in 0 <= nu < 0.5 a knot; got {list(self.nu)}")

    def _bad(self, key: str, text: str) -> InputError:
        return InputError(f"Blend curve {self.first} + {self.second}: {key} {text}.", key=key)

    @property
    def pair(self) -> frozenset[str]:
        """The two resins, in no order."""
        return frozenset((self.first, self.second))

    @property
    def span(self) -> float:
        """Logarithm of the ratio of the end moduli."""
        return math.log(self.E[-1] / self.E[0])

    @property
    def indicative(self) -> bool:
        """True where no source stands behind the curve."""
        return self.source.strip().lower().startswith(INDICATIVE)

    def shape(self, t: Floats, side: str = "value") -> tuple[Floats, Floats, Floats, Floats]:
        """How log E goes from end to end, and the excess of log(1 - 2 nu) over a straight line.

        Parameters
        ----------
        t : ndarray
            Fraction of `second`.
        side : str
            One of `SIDES`.

        Returns
        -------
        g, dg : ndarray
            0 at pure `first`, 1 at pure `second`, monotone; and its slope.
        q, dq : ndarray
            Excess of log(1 - 2 nu), 0 at both ends; and its slope.
        """
        values = {"value": self.E, "low": self.E_low, "high": self.E_high}[side]
        logs = [math.log(v) for v in values]
        span = logs[-1] - logs[0]
        g, dg = monotone(self.fraction, tuple((v - logs[0]) / span for v in logs), t)
        if not self.nu:
            return g, dg, np.zeros_like(g), np.zeros_like(g)
        free = [math.log(1.0 - 2.0 * v) for v in self.nu]
        excess = tuple(
            v - (1.0 - f) * free[0] - f * free[-1] for v, f in zip(free, self.fraction, strict=True)
        )
        q, dq = monotone(self.fraction, excess, t)
        return g, dg, q, dq

    def modulus(self, fraction: float, side: str = "value") -> float:
        """Young's modulus at that fraction of `second`, MPa, as recorded."""
        g = self.shape(np.array([fraction]), side)[0][0]
        return float(math.exp((1.0 - g) * math.log(self.E[0]) + g * math.log(self.E[-1])))

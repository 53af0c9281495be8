"""Hashin-Shtrikman bounds of an isotropic blend, and a smooth clamp that keeps a law inside them.

Arrays here run over phases first: ``w`` has shape (K, n), K resins and n blends, and sums to 1
over the phases. Moduli are handled by their natural logarithm, and every derivative is that of
the law extended to weights that need not sum to 1 by dividing them by their sum, so that
``sum_m w_m d_m = 0``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = [
    "Band",
    "clamp",
    "extent",
    "generalised_mean",
    "hashin_shtrikman",
    "polarisability",
]

Floats = NDArray[np.float64]

#: Width of the transition at a bound, as a part of the distance that a law can have from it.
SOFTNESS = 0.05
#: A law is said to have been moved where its log modulus changed by more than this.
NOTABLE = 1e-3
#: Bounds closer than this (in log modulus) are treated as one value when it comes to slopes.
NARROW = 1e-8


@dataclass(frozen=True, slots=True)
class Band:
    """Both bounds of one modulus: logarithms, shape (n,), and slopes of these, shape (K, n)."""

    low: Floats
    high: Floats
    d_low: Floats
    d_high: Floats


def polarisability(bulk: Floats, shear: Floats) -> Floats:
    """Zeta = G (9 K + 8 G) / (6 (K + 2 G)), which stands for the medium in the shear bounds."""
    return shear * (9.0 * bulk + 8.0 * shear) / (6.0 * (bulk + 2.0 * shear))


def generalised_mean(w: Floats, x: Floats, z: Floats) -> tuple[Floats, Floats]:
    """Solve ``1 / (X + z) = sum_m w_m / (x_m + z)`` without cancellation.

    z = 0 gives the harmonic (Reuss) mean; a large z tends to the arithmetic (Voigt) mean.

    Parameters
    ----------
    w : ndarray, shape (K, n)
    x : ndarray, shape (K,)
        One modulus of each phase, MPa.
    z : ndarray, shape (1,) or (n,)

    Returns
    -------
    mean : ndarray, shape (n,)
    slope : ndarray, shape (K, n)
        Of the logarithm of the mean.
    """
    inverse = 1.0 / (x[:, None] + z)
    part = w * inverse
    weight = part.sum(axis=0)
    top = np.multiply(part, x[:, None], out=part).sum(axis=0)
    mean = top / weight
    slope = x[:, None] - mean
    slope /= top
    slope *= inverse
    return mean, slope


def extent(w: Floats, x: Floats) -> tuple[Floats, Floats]:
    """Smallest and largest modulus among the phases that each blend holds, shapes (n,)."""
    if np.all(w > 0):
        return np.full(w.shape[1], x.min()), np.full(w.shape[1], x.max())
    low, high = np.full(w.shape[1], np.inf), np.zeros(w.shape[1])
    for m, xm in enumerate(x):
        here = w[m] > 0
        np.minimum(low, xm, out=low, where=here)
        np.maximum(high, xm, out=high, where=here)
    return low, high


def hashin_shtrikman(w: Floats, bulk: Floats, shear: Floats) -> tuple[Band, Band]:
    """Bounds of bulk and shear modulus of an isotropic blend of K phases.

    Only phases that a blend holds count, so that a resin which it does not hold cannot widen
    its bounds. (With one or two phases an absent phase leaves a pure blend, whose bounds do not
    depend on the medium.) Slopes at pure blends are those on the way towards each other phase.

    Source: Z. Hashin & S. Shtrikman, J. Mech. Phys. Solids 11 (1963) 127; for phases whose bulk
    and shear moduli are ordered differently L. J. Walpole, J. Mech. Phys. Solids 14 (1966) 151.
    """
    (k_min, k_max), (g_min, g_max) = extent(w, bulk), extent(w, shear)
    sparse = len(bulk) > 2 and not np.all(w > 0)
    if sparse:
        low, high = (k_min, g_min), (k_max, g_max)
    else:
        low = (np.array([bulk.min()]), np.array([shear.min()]))
        high = (np.array([bulk.max()]), np.array([shear.max()]))
    bands = []
    for x, x_min, x_max, medium in (
        (bulk, k_min, k_max, lambda k, g: 4.0 / 3.0 * g),
        (shear, g_min, g_max, polarisability),
    ):
        bottom, d_bottom = generalised_mean(w, x, medium(*low))
        top, d_top = generalised_mean(w, x, medium(*high))
        log_low = np.log(np.clip(bottom, x_min, x_max))
        log_high = np.maximum(np.log(np.clip(top, x_min, x_max)), log_low)
        band = Band(log_low, log_high, d_bottom, d_top)
        rows = np.flatnonzero(band.high - band.low < NARROW) if sparse else np.empty(0, np.intp)
        for m in range(len(x) if rows.size else 0):
            near = w[:, rows]
            soft = medium(np.minimum(k_min[rows], bulk[m]), np.minimum(g_min[rows], shear[m]))
            hard = medium(np.maximum(k_max[rows], bulk[m]), np.maximum(g_max[rows], shear[m]))
            band.d_low[m, rows] = generalised_mean(near, x, soft)[1][m]
            band.d_high[m, rows] = generalised_mean(near, x, hard)[1][m]
        bands.append(band)
    return bands[0], bands[1]


def _soft(s: Floats) -> tuple[Floats, Floats]:
    """A C2 stand-in for max(s, 0) on -1..1: 0 below, s above, never under max(s, 0)."""
    s2 = s * s
    value = 0.1875 + s * 0.5 + s2 * (0.375 - 0.0625 * s2)
    slope = 0.5 + s * (0.75 - 0.25 * s2)
    return value, slope


def _parallel(a: Floats, b: Floats) -> Floats:
    """``a b / (a + b)``, 0 where both are 0: a smooth "smaller of the two"."""
    total = a + b
    out = np.zeros(np.broadcast(a, b).shape)
    np.divide(a * b, total, out=out, where=total > 0)
    return out


def _floor(
    x: Floats, dx: Floats, low: Floats, d_low: Floats, soft: Floats, d_soft: Floats
) -> tuple[Floats, Floats]:
    """Smooth ``max(x, low)`` with transition half-width `soft`, and its slopes."""
    safe = np.where(soft > 0, soft, 1.0)
    far = np.where(x >= low, 1.0, -1.0)
    s = np.where(soft > 0, np.clip((x - low) / safe, -1.0, 1.0), far)
    q, slope = _soft(s)
    y = np.where(s >= 1.0, x, low + soft * q)
    dy = d_low + slope * (dx - d_low) + (q - s * slope) * d_soft
    return y, dy


def clamp(
    w: Floats, phase: Floats, x: Floats, dx: Floats, band: Band
) -> tuple[Floats, Floats, NDArray[np.bool_]]:
    """Keep the log modulus `x` between its bounds, smoothly.

    The identity well inside; on and beyond a bound it bends over within a width that is
    `SOFTNESS` of the room that a blend has on that side (the gap between the bounds in parallel
    with the gap between the geometric and the harmonic, or the arithmetic, mean of the phases),
    which goes to zero at pure resins just as the bounds close up. The result never leaves the
    bounds and has continuous second derivatives in between.

    Parameters
    ----------
    w : ndarray, shape (K, n)
    phase : ndarray, shape (K,)
        The modulus of each phase, MPa.
    x, dx : ndarray, shapes (n,) and (K, n)
        The law's log modulus and its slopes.
    band : Band

    Returns
    -------
    y, dy, moved
        Shapes (n,), (K, n), (n,).
    """
    logs = np.log(phase)
    middle = logs @ w
    reuss, d_reuss = generalised_mean(w, phase, np.zeros(1))
    voigt = phase @ w
    d_middle = logs[:, None] - middle
    d_voigt = phase[:, None] / voigt - 1.0
    gap, d_gap = band.high - band.low, band.d_high - band.d_low

    def half_width(room: Floats, d_room: Floats) -> tuple[Floats, Floats]:
        room = np.maximum(room, 0.0)
        total = np.where(gap + room > 0, gap + room, 1.0)
        share, rest = room / total, gap / total
        return SOFTNESS * _parallel(gap, room), SOFTNESS * (share**2 * d_gap + rest**2 * d_room)

    soft, d_soft = half_width(middle - np.log(reuss), d_middle - d_reuss)
    y, dy = _floor(x, dx, band.low, band.d_low, soft, d_soft)
    soft, d_soft = half_width(np.log(voigt) - middle, d_voigt - d_middle)
    y, dy = _floor(-y, -dy, -band.high, -band.d_high, soft, d_soft)
    y, dy = np.clip(-y, band.low, band.high), -dy
    rows = np.flatnonzero(gap < NARROW)
    if rows.size:
        near = Band(band.low[rows], band.high[rows], band.d_low[:, rows], band.d_high[:, rows])
        cone = _cone(w[:, rows], phase, x[rows] - near.low, dx[:, rows], near)
        dy[:, rows] = cone - np.einsum("kn,kn->n", w[:, rows], cone)
    return y, dy, np.abs(y - x) > NOTABLE


def _cone(w: Floats, phase: Floats, above_low: Floats, dx: Floats, band: Band) -> Floats:
    """Slopes of the clamped log modulus where both bounds meet (pure or equal phases).

    There the clamp is a cone: it has a slope towards each other phase, but no gradient. Row m
    is the slope on the way towards pure phase m. `above_low` tells how far the unclamped value
    lies above the one bound.
    """
    middle = np.log(phase)[:, None] - np.log(phase) @ w
    _, d_reuss = generalised_mean(w, phase, np.zeros(1))
    d_voigt = phase[:, None] / (phase @ w) - 1.0
    low = np.minimum(band.d_low, band.d_high)
    gap = np.maximum(band.d_high - low, 0.0)
    none = np.zeros_like(gap)
    below = SOFTNESS * _parallel(gap, np.maximum(middle - d_reuss, 0.0))
    above = SOFTNESS * _parallel(gap, np.maximum(d_voigt - middle, 0.0))
    y, _ = _floor(dx, none, low, none, below, none)
    y, _ = _floor(-y, none, -(low + gap), none, above, none)
    beyond = np.where(above_low > 0, low + gap, low)
    return np.where(np.abs(above_low) > NARROW, beyond, -y)

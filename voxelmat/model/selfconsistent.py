"""The self-consistent estimate: each phase sits in a medium that has the blend's own moduli."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import ConvergenceError
from voxelmat.model.bounds import generalised_mean, polarisability

__all__ = ["self_consistent"]

Floats = NDArray[np.float64]

_STEPS = 80
_TOLERANCE = 2e-14


def _medium_slope(w: Floats, x: Floats, z: Floats, mean: Floats) -> Floats:
    """How the generalised mean grows with z, shape (n,)."""
    weight, pull = np.zeros(w.shape[1]), np.zeros(w.shape[1])
    for m, xm in enumerate(x):
        part = w[m] / (xm + z)
        weight += part
        pull += (mean - xm) * part / (xm + z)
    return pull / weight


def _parts(
    w: Floats, bulk: Floats, shear: Floats, g: Floats
) -> tuple[Floats, Floats, Floats, Floats, Floats, Floats, Floats, Floats]:
    """Both right-hand sides at the trial shear modulus g, with all that their slopes need."""
    k, dk_w = generalised_mean(w, bulk, 4.0 / 3.0 * g)
    dk_g = 4.0 / 3.0 * _medium_slope(w, bulk, 4.0 / 3.0 * g, k)
    z = polarisability(k, g)
    z_k = 5.0 / 3.0 * (g / (k + 2.0 * g)) ** 2
    z_g = (9.0 * k**2 + 16.0 * k * g + 16.0 * g**2) / (6.0 * (k + 2.0 * g) ** 2)
    out, dg_w = generalised_mean(w, shear, z)
    dg_z = _medium_slope(w, shear, z, out)
    return k, dk_w, dk_g, out, dg_w, dg_z, z_k, z_g


def self_consistent(
    w: Floats, bulk: Floats, shear: Floats, log_low: Floats, log_high: Floats
) -> tuple[Floats, Floats, Floats, Floats]:
    """Solve sum w (K_m - K) / (K_m + 4 G / 3) = 0 with sum w (G_m - G) / (G_m + zeta) = 0.

    One unknown, log G: the bulk modulus follows from it. Newton steps, halved intervals where
    they would leave the bracket; slopes by implicit differentiation.

    Parameters
    ----------
    w : ndarray, shape (K, n)
    bulk, shear : ndarray, shape (K,)
        MPa.
    log_low, log_high : ndarray, shape (n,)
        Hashin-Shtrikman bounds of log G, the first bracket.

    Returns
    -------
    log_bulk, log_shear : ndarray, shape (n,)
    d_log_bulk, d_log_shear : ndarray, shape (K, n)

    Raises
    ------
    ConvergenceError
        If 80 steps do not bring log G to 2e-14.

    Notes
    -----
    Source: R. Hill, J. Mech. Phys. Solids 13 (1965) 213; B. Budiansky, ibid. 223.
    """
    low, high = log_low.copy(), np.maximum(log_low, log_high)
    y = 0.5 * (low + high)
    change = np.inf
    for _ in range(_STEPS):
        g = np.exp(y)
        _, _, dk_g, out, _, dg_z, z_k, z_g = _parts(w, bulk, shear, g)
        gap = np.log(out) - y
        rate = dg_z * (z_k * dk_g + z_g) * g / out - 1.0
        low, high = np.where(gap >= 0, y, low), np.where(gap <= 0, y, high)
        step = y - gap / np.where(rate < 0, rate, -1.0)
        inside = (step >= low) & (step <= high)
        new = np.where(inside, step, 0.5 * (low + high))
        change = float(np.max(np.abs(new - y), initial=0.0))
        y = new
        if change <= _TOLERANCE * (1.0 + float(np.max(np.abs(y), initial=0.0))):
            break
    else:
        raise ConvergenceError(
            f"The self-consistent blend law stopped after {_STEPS} steps at a change of "
            f"{change:.1e} in log G. Use another law for these resins, for example log mixing.",
            [change],
        )
    g = np.exp(y)
    k, dk_w, dk_g, out, dg_w, dg_z, z_k, z_g = _parts(w, bulk, shear, g)
    dk_w *= k
    dg_w *= out
    d_shear = (dg_w + dg_z * z_k * dk_w) / (1.0 - dg_z * (z_k * dk_g + z_g))
    d_bulk = dk_w + dk_g * d_shear
    return np.log(k), y, d_bulk / k, d_shear / g

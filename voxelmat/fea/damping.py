"""Loss factors of modes from the loss factors of the materials, weighted by strain energy.

The modal strain energy method: C. D. Johnson & D. A. Kienholz, AIAA Journal 20 (1982) 1284 (page
from memory). A blend's loss follows from its law, taken with moduli that have a small imaginary
part (the correspondence principle of linear viscoelasticity).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.sensitivity import stiffness_forms
from voxelmat.model.part import Part

__all__ = ["Losses", "palette_loss", "used_resins"]

Double = NDArray[np.float64]

# Relative step of the slope of a blend law along the loss factors.
_STEP = 1e-4


def used_resins(part: Part) -> NDArray[np.bool_]:
    """Which of the part's resins occur in a voxel that is solved."""
    labels = np.unique(part.labels[part.solid])
    return np.asarray(np.max(part.palette_fractions()[labels], axis=0, initial=0.0) > 0)


def palette_loss(part: Part) -> tuple[Double, Double]:
    """Loss moduli of the Lame constants of each palette entry, MPa.

    A resin with loss factor d has the moduli K (1 + i d) and G (1 + i d); the imaginary part of a
    blend's moduli is the slope of its law along (d K, d G) of its resins, to first order in d.

    Raises
    ------
    InputError
        Where a resin that occurs has no loss factor.
    """
    used = used_resins(part)
    lost = [m.name for m, u in zip(part.resins, used, strict=True) if u and m.loss_factor is None]
    if lost:
        raise InputError(
            f"These materials have no loss factor: {', '.join(lost)}. Add loss_factor to their "
            f"records, or give one loss factor for all modes.",
            key="loss_factor",
        )
    d = np.array([m.loss_factor.value if m.loss_factor is not None else 0.0 for m in part.resins])
    bulk = np.array([m.bulk for m in part.resins])
    shear = np.array([m.shear for m in part.resins])
    slopes = [np.zeros(len(part.palette)), np.zeros(len(part.palette))]
    names = [m.name for m in part.resins]
    if len(part.palette) > 1:
        fractions = part.palette_fractions()[1:]
        for sign in (1.0, -1.0):
            turn = 1.0 + sign * _STEP * d
            value = part.law.evaluate(fractions, bulk * turn, shear * turn, resins=names)
            slopes[0][1:] += sign * value.bulk / (2.0 * _STEP)
            slopes[1][1:] += sign * value.shear / (2.0 * _STEP)
    return slopes[0] - 2.0 * slopes[1] / 3.0, slopes[1]


class Losses:
    """Loss factor of any displacement field of a part.

    Parameters
    ----------
    part : Part
    lam, mu : ndarray of float64, shape (nz, ny, nx)
        Lame constants, MPa, times the filled fraction.
    element : str
    springs : ndarray of float64 or None, shape (3, nz+1, ny+1, nx+1)
        To ground, N/mm; they store energy and lose none.
    """

    def __init__(
        self, part: Part, lam: Double, mu: Double, element: str, springs: Double | None
    ) -> None:
        labels, fill = part.labels.T, part.fill.T
        loss_lam, loss_mu = palette_loss(part)
        self._loss = loss_lam[labels] * fill, loss_mu[labels] * fill
        self._lam, self._mu = lam, mu
        self._spacing, self._element, self._springs = part.grid.spacing, element, springs

    def of(self, u: Double) -> float:
        """Loss factor of a field ``[3, nz+1, ny+1, nx+1]``; 0 where it stores no energy."""
        dlam, dmu = stiffness_forms(u, u, self._lam, self._mu, self._spacing, self._element)
        stored = float((self._lam * dlam + self._mu * dmu).sum())
        if self._springs is not None:
            stored += float((self._springs * u * u).sum())
        lost = float((self._loss[0] * dlam + self._loss[1] * dmu).sum())
        return lost / stored if stored > 0 else 0.0

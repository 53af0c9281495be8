"""Thermal expansion of the blends of a palette."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.model.part import Part

__all__ = ["palette_expansion"]

Floats = NDArray[np.float64]

# Bulk moduli closer than this (relative) count as equal: every phase then strains freely.
_EQUAL = 1e-9


def _blended(w: Floats, bulk: Floats, expansion: Floats, mixed: float) -> float:
    """Expansion of one blend with bulk modulus `mixed`; see `palette_expansion`."""
    held = np.flatnonzero(w > 0)
    if len(held) == 2:
        (k1, k2), (a1, a2) = bulk[held], expansion[held]
        if abs(k1 - k2) > _EQUAL * max(k1, k2):
            return float(a1 + (a2 - a1) * (1 / mixed - 1 / k1) / (1 / k2 - 1 / k1))
    weight = w * bulk
    return float(weight[held] @ expansion[held] / weight.sum())


def palette_expansion(part: Part) -> tuple[Floats, bool] | None:
    """Coefficient of thermal expansion of each palette entry, 1/K.

    A blend of two resins expands by the relation of Levin, exact for isotropic phases, from the
    bulk modulus that the part's law gives it; a blend of more by the mean weighted with bulk
    moduli (Turner), which is an estimate.

    Returns
    -------
    (expansion, estimated) or None
        Shape (palette,), 0 for empty space, and whether a label in use is such an estimate;
        None where a resin in use has no coefficient.

    Notes
    -----
    V. M. Levin, Mechanics of Solids 2 (1967) 58; P. S. Turner, J. Res. Natl. Bur. Stand. 37
    (1946) 239; both from memory.
    """
    fractions, (mixed, _) = part.palette_fractions(), part.palette_moduli()
    used = np.unique(part.labels[part.solid])
    needed = fractions[used].max(axis=0, initial=0.0) > 0
    if any(n and m.expansion is None for n, m in zip(needed.tolist(), part.resins, strict=True)):
        return None
    alpha = np.array([0.0 if m.expansion is None else m.expansion.value for m in part.resins])
    bulk = np.array([m.bulk for m in part.resins])
    out = np.zeros(len(part.palette))
    for label in used[used > 0]:
        out[label] = _blended(fractions[label], bulk, alpha, float(mixed[label]))
    return out, bool(np.any((fractions[used] > 0).sum(axis=1) > 2))

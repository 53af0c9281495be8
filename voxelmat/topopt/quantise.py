"""A palette for a design: its blends, grouped at quantiles."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

__all__ = ["Quantised", "quantise"]

Array = NDArray[np.float64]

_ROUNDS = 8
_TRACE = 1e-4  # a smaller fraction of a resin is dropped from a blend


@dataclass(frozen=True, slots=True, kw_only=True)
class Quantised:
    """Table of blends (levels, K), the row of each voxel (n,), and the largest difference."""

    table: Array
    index: NDArray[np.intp]
    error: float


def quantise(fractions: Array, weight: Array, stiffness: Array, levels: int) -> Quantised:
    """Group blends: split at the weighted median until there are enough groups.

    Always split is the group that holds the largest weighted squared deviation, along the
    direction (a fraction or the log stiffness) in which it deviates most; then every blend goes
    to the nearest group, a few times over. Levels so lie where the design is dense. Pure resins
    stay pure.

    Parameters
    ----------
    fractions : ndarray, (n, K)
        Rows sum to 1.
    weight : ndarray, (n,)
        How much of each there is.
    stiffness : ndarray, (n,)
        Shear modulus, MPa.
    levels : int
        Groups at most, at least one.

    Returns
    -------
    Quantised
    """
    if not len(fractions):  # an early design may lie below the level of its outline everywhere
        first = np.eye(fractions.shape[1])[:1]
        return Quantised(table=first, index=np.empty(0, np.intp), error=0.0)
    clean = np.where(fractions < _TRACE, 0.0, fractions)
    clean /= clean.sum(1, keepdims=True)
    rows, back = np.unique(clean, axis=0, return_inverse=True)
    back = back.reshape(-1)
    weight = np.maximum(weight, 1e-12)
    amount = np.bincount(back, weights=weight, minlength=len(rows)).astype(np.float64)
    if len(rows) <= levels:
        return Quantised(table=rows, index=back, error=float(np.abs(rows[back] - fractions).max()))
    log = np.zeros(len(rows))
    log[back] = np.log(stiffness)
    span = float(np.ptp(log))
    features: Array = np.column_stack([rows, log / span if span > 0 else 0 * log])
    pure = rows.max(1) == 1.0
    groups: list[NDArray[np.intp]] = [
        np.flatnonzero(pure & (rows[:, m] == 1.0)) for m in range(rows.shape[1])
    ]
    groups = [g for g in groups if len(g)]
    mixed = np.flatnonzero(~pure)
    groups.append(mixed)
    spread = [_spread(features, amount, g) for g in groups]
    while len(groups) < levels:
        worst = max(range(len(groups)), key=lambda g: spread[g][0])
        if spread[worst][0] <= 0:
            break
        low, high = _split(features, amount, groups[worst], spread[worst][1])
        groups[worst], spread[worst] = low, _spread(features, amount, low)
        groups.append(high)
        spread.append(_spread(features, amount, high))
    row_of = np.empty(len(rows), dtype=np.intp)
    for number, g in enumerate(groups):
        row_of[g] = number
    row_of[mixed] = _settled(features[mixed], amount[mixed], row_of[mixed])
    total = np.bincount(row_of, weights=amount, minlength=len(groups))
    table = np.column_stack(
        [np.bincount(row_of, weights=amount * r, minlength=len(groups)) / total for r in rows.T]
    )
    table[table < 1e-9] = 0.0
    table /= table.sum(1, keepdims=True)
    index = row_of[back]
    return Quantised(table=table, index=index, error=float(np.abs(table[index] - fractions).max()))


def _settled(features: Array, amount: Array, group: NDArray[np.intp]) -> NDArray[np.intp]:
    """Move each row to the nearest group mean, a few times over; no group becomes empty."""
    names, group = np.unique(group, return_inverse=True)
    for _ in range(_ROUNDS):
        total = np.bincount(group, weights=amount)
        means = np.column_stack(
            [np.bincount(group, weights=amount * f) / total for f in features.T]
        )
        nearest = np.asarray(cKDTree(means).query(features)[1])
        if len(np.unique(nearest)) < len(names) or np.array_equal(nearest, group):
            break
        group = nearest
    return np.asarray(names[group])


def _spread(features: Array, amount: Array, group: NDArray[np.intp]) -> tuple[float, int]:
    """Largest weighted squared deviation over the feature axes, and its axis."""
    if len(group) < 2:
        return 0.0, 0
    f, a = features[group], amount[group]
    deviation = a @ (f - a @ f / a.sum()) ** 2
    axis = int(deviation.argmax())
    return float(deviation[axis]), axis


def _split(
    features: Array, amount: Array, group: NDArray[np.intp], axis: int
) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Two non-empty halves at the weighted median."""
    order = group[np.argsort(features[group, axis], kind="stable")]
    below = np.cumsum(amount[order])
    cut = int(np.searchsorted(below, 0.5 * below[-1])) + 1
    cut = min(max(cut, 1), len(order) - 1)
    return order[:cut], order[cut:]

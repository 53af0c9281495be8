"""Limits on volumes, masses, costs and resins that no design meets, found before the run.

Such amounts are linear in how much of each resin lies where. Voxels that are frozen alike and
count in the same limits are one group, so a linear programme of a few variables says exactly
whether all limits can be met at once.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import linprog

from voxelmat.errors import InputError
from voxelmat.topopt.responses import Amount, Response
from voxelmat.topopt.unknowns import Unknowns
from voxelmat.units import number

__all__ = ["check_amounts"]

Array = NDArray[np.float64]
Asked = tuple[Response, float, bool]

_ROUNDING = 1e-9
# Excess over a limit, of the limit, that the linear programme's own tolerance allows.
_GIVE = 1e-6


def check_amounts(limits: tuple[Asked, ...], unknowns: Unknowns) -> None:
    """Refuse limits (response, value, whether at least) that no design meets.

    Raises
    ------
    InputError
        Naming the limit, or those that contradict each other.
    """
    amounts = [(r, v, least) for r, v, least in limits if isinstance(r, Amount)]
    for response, value, at_least in amounts:
        low, high = _range(response, unknowns)
        _check_one(response, value, at_least, low, high)
    if len(amounts) > 1:
        _check_together(amounts, unknowns)


def _range(a: Amount, unknowns: Unknowns) -> tuple[float, float]:
    """Least and greatest value over all designs."""
    c = unknowns.choice
    frozen = c.solid if unknowns.void is not None else c.domain
    lowest = np.where(c.resin < 0, a.factor.min(), a.factor[np.maximum(c.resin, 0)])
    highest = np.where(c.resin < 0, a.factor.max(), a.factor[np.maximum(c.resin, 0)])
    low = float((a.weight * lowest)[frozen].sum())
    return low + a.always, float((a.weight * highest)[c.domain & ~c.empty].sum()) + a.always


def _check_one(a: Amount, value: float, at_least: bool, low: float, high: float) -> None:
    unit = f" {a.unit}" if a.unit else ""
    if not at_least and low > value + _ROUNDING * abs(value):
        raise InputError(
            f"The {a.name} is limited to {number(value)}{unit}, but the voxels that must be "
            f"solid already hold {number(low)}; raise the limit or free some of them."
        )
    if at_least and high < value - _ROUNDING * abs(value):
        raise InputError(
            f"The {a.name} must be at least {number(value)}{unit}, but filling everything that "
            f"may be filled only gives {number(high)}; lower the limit or allow more."
        )


def _check_together(amounts: list[tuple[Amount, float, bool]], unknowns: Unknowns) -> None:
    c, resins = unknowns.choice, unknowns.resins
    places = c.domain & ~c.empty
    must = c.solid[places] | (unknowns.void is None)
    weights = np.array([a.weight[places] for a, _, _ in amounts])
    head = np.column_stack([must, c.resin[places], *(weights > 0)]).astype(np.int64)
    kinds, group = np.unique(head, axis=0, return_inverse=True)
    group = group.ravel()
    n = len(kinds)
    room = np.bincount(group, c.fill[places], n)
    rows, right = [], []
    for (a, value, at_least), weight in zip(amounts, weights, strict=True):
        per = np.bincount(group, weight, n) / np.maximum(room, 1e-300)
        sign = -1.0 if at_least else 1.0
        size = max(abs(value), 1e-300)
        # The last variable is the excess that all limits are granted.
        rows.append(np.append(sign * np.outer(per, a.factor).ravel() / size, -1.0))
        right.append(sign * (value - a.always) / size)
    fills = np.hstack([np.kron(np.eye(n), np.ones(resins)), np.zeros((n, 1))])
    solid = kinds[:, 0] == 1
    bounds: list[tuple[float, float | None]] = [
        (0.0, None) if kind[1] < 0 or kind[1] == m else (0.0, 0.0)
        for kind in kinds
        for m in range(resins)
    ]
    answer = linprog(
        np.append(np.zeros(n * resins), 1.0),
        A_ub=np.vstack([np.array(rows), fills[~solid]]),
        b_ub=np.append(right, room[~solid]),
        A_eq=fills[solid] if solid.any() else None,
        b_eq=room[solid] if solid.any() else None,
        bounds=[*bounds, (0.0, None)],
    )
    excess = float(answer.fun) if answer.status == 0 and answer.fun is not None else 0.0
    if excess > _GIVE:
        named = ", ".join(
            f"{a.name} {'at least' if at_least else 'at most'} {number(value)} {a.unit}".rstrip()
            for a, value, at_least in amounts
        )
        raise InputError(
            f"No design meets all of these at once: {named}. Each would have to give way by "
            f"{number(100 * excess, 3)} %."
        )

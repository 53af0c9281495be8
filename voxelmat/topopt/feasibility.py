"""What can be reached at all: measures of designs at the ends of the choice, before a run.

All of one resin, as solid as may be, for every resin; and only what must be solid. Amounts are
linear, so their range is exact (`voxelmat.topopt.contradict` refuses limits outside of it). For
compliance the design that is solid everywhere, of the resin whose bulk and shear moduli are the
largest, is a bound: no voxel of any design is stiffer (minimum potential energy; laws of blends
lie between their resins, see `voxelmat.model.bounds`). Other measures have no bound that is so
cheap; for them the designs tried say what is near, not what is impossible.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import ConvergenceError, InputError
from voxelmat.model.design_spec import DesignSpec
from voxelmat.model.design_stages import Reach
from voxelmat.model.goal import AtLeast, AtMost
from voxelmat.model.loadcase import LoadCase
from voxelmat.model.measure_amount import Cost, Mass, ResinVolume, Volume
from voxelmat.model.part import Part
from voxelmat.monitor import SILENT, Monitor
from voxelmat.topopt.problem import LayoutProblem
from voxelmat.topopt.responses import Amount, ComplianceResponse, Response, told
from voxelmat.topopt.setup import layout_problem
from voxelmat.topopt.unknowns import Fields

__all__ = ["check_reach", "reachable", "worth_checking"]

Array = NDArray[np.float64]

_TOLERANCE = 1e-4
#: Of many resins only these many are tried: the stiffest, the softest, and some between.
_MOST_TRIED = 6


def worth_checking(spec: DesignSpec) -> bool:
    """Whether a limit is on something else than an amount, which is checked exactly anyway."""
    general = [x.measure for x in spec.limits if isinstance(x, AtMost | AtLeast)]
    return any(not isinstance(m, Volume | Mass | Cost | ResinVolume) for m in general)


def reachable(
    part: Part,
    load_cases: Sequence[LoadCase],
    spec: DesignSpec,
    *,
    element: str = "icmb",
    monitor: Monitor = SILENT,
) -> tuple[Reach, ...]:
    """Between which values the objective and every limited quantity can lie.

    Solves a handful of designs, which takes about as long as a handful of iterations.

    Parameters
    ----------
    part, load_cases, spec, element
        As for `voxelmat.topopt.optimise.optimise`.
    monitor : Monitor

    Returns
    -------
    tuple of Reach
        The objective's, then one a limit.

    Raises
    ------
    InputError
        As `optimise`.
    """
    problem, _ = layout_problem(part, load_cases, spec, element=element, monitor=monitor)
    problem.physics.tolerance = _TOLERANCE
    responses: list[Response] = [problem.objective, *(b.response for b in problem.bounds)]
    tried: list[tuple[str, Array]] = []
    designs = _designs(problem)
    for n, (name, fields) in enumerate(designs):
        monitor.report("looking at what can be reached", done=n, total=len(designs), design=name)
        tried.append((name, _values(problem, fields, responses)))
    monitor.report("looking at what can be reached", done=len(designs), total=len(designs))
    asked: list[tuple[str, float | None]] = [
        ("greatest" if problem.goal.maximise else "least", None),
        *(("at least" if b.at_least else "at most", b.limit) for b in problem.bounds),
    ]
    found = []
    for n, (response, (sense, limit)) in enumerate(zip(responses, asked, strict=True)):
        known = [(name, float(v[n])) for name, v in tried if math.isfinite(v[n])]
        if not known:
            continue
        low = min(known, key=lambda pair: pair[1])
        high = max(known, key=lambda pair: pair[1])
        found.append(
            Reach(
                name=response.name,
                unit=response.unit,
                sense=sense,
                limit=limit,
                least=low[1],
                greatest=high[1],
                of_least=low[0],
                of_greatest=high[0],
                bound=_is_bound(problem, response),
            )
        )
    return tuple(found)


def check_reach(found: Sequence[Reach]) -> tuple[str, ...]:
    """Refuse a limit that is provably out of reach; say which others lie beyond what was tried.

    Raises
    ------
    InputError
        Naming the limit, the end of the range and the distance.
    """
    for reach in found:
        if reach.bound and reach.missed_by > 1e-3 * abs(reach.limit or 0.0):
            raise InputError(f"No design can meet a limit. {reach.sentence}")
    return tuple(r.sentence for r in found if r.missed_by > 0)


def _designs(problem: LayoutProblem) -> list[tuple[str, Fields]]:
    """Designs at the ends of the choice, with the frozen voxels as they must be."""
    unknowns = problem.unknowns
    c, p = unknowns.choice, unknowns.palette
    even = np.full(p.bulk.size, 1.0 / p.bulk.size)
    full = unknowns.forward(unknowns.start(1.0, even))
    least = unknowns.forward(unknowns.start(0.0, even))
    order = np.argsort(-p.shear, kind="stable")
    if len(order) > _MOST_TRIED:
        order = order[np.unique(np.linspace(0, len(order) - 1, _MOST_TRIED).astype(int))]
    found = []
    for m in order:
        w = np.zeros_like(full.w)
        w[m][c.domain] = 1.0
        for frozen in range(p.bulk.size):
            at = c.domain & (c.resin == frozen)
            w[:, at] = 0.0
            w[frozen][at] = 1.0
        found.append((f"all {p.names[m]}", unknowns.with_fractions(full, w)))
        if unknowns.void is not None and m == order[0] and c.solid.any():
            words = f"only what must be solid, of {p.names[m]}"
            found.append((words, unknowns.with_fractions(least, w)))
    return found


def _values(problem: LayoutProblem, fields: Fields, responses: Sequence[Response]) -> Array:
    """What people are told of each response; nan where a design cannot be solved."""
    physics = problem.physics
    physics.update(fields)
    values = np.full(len(responses), np.nan)
    for n, response in enumerate(responses):
        try:
            values[n] = told(response, physics, response.value(physics)[0])
        except ConvergenceError:
            continue
    return values


def _is_bound(problem: LayoutProblem, response: Response) -> bool:
    """Whether the designs tried bound a response from the side that its limits are on."""
    p = problem.unknowns.palette
    if isinstance(response, Amount):
        return False  # exact, and checked elsewhere
    stiffest = int(p.shear.argmax())
    dominates = p.bulk[stiffest] >= p.bulk.max() and p.shear[stiffest] >= p.shear.max()
    return isinstance(response, ComplianceResponse) and bool(dominates)

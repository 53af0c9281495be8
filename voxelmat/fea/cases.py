"""Solve several load cases of a part: cases held alike share one set-up of the solver."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.assemble import Assembled, assemble, moduli
from voxelmat.fea.element import DEFAULT
from voxelmat.fea.operator import touched_nodes
from voxelmat.fea.static import _first_guess, _keep_pieces, _result, _without_loose
from voxelmat.fea.system import LinearSystem
from voxelmat.model.loadcase import LoadCase
from voxelmat.model.part import Part
from voxelmat.model.result import StaticResult
from voxelmat.monitor import SILENT, Monitor
from voxelmat.provenance import utc_now

__all__ = ["solve_cases"]

Double = NDArray[np.float64]


class _Ready(NamedTuple):
    """A load case as arrays: moduli without loose pieces, what acts, cautions."""

    lam: Double
    mu: Double
    acts: Assembled
    cautions: list[str]

    def held_alike(self) -> str:
        """Equal for cases whose stiffness, supports, springs, beds and plates are the same."""
        digest = hashlib.blake2b(digest_size=16)
        acts = self.acts
        arrays: list[NDArray[Any]] = [np.packbits(self.mu > 0), np.packbits(acts.held)]
        arrays += [] if acts.springs is None else [acts.springs]
        for bed in acts.beds:
            arrays += [bed.node, bed.block]
        for bound in acts.plates.plates if acts.plates is not None else ():
            # A plate's motion is part of its set-up; a force on it is not.
            arrays += [bound.node, bound.given, bound.free]
        for array in arrays:
            digest.update(str((array.shape, array.dtype)).encode())
            digest.update(np.ascontiguousarray(array).data)
        return digest.hexdigest()


def _ready(part: Part, case: LoadCase) -> _Ready:
    lam, mu = moduli(part)
    acts = assemble(part, case, everything=True)
    keep, cautions = _keep_pieces(part, case, acts, mu)
    lam *= keep
    mu *= keep
    return _Ready(lam, mu, _without_loose(acts, touched_nodes(keep)), cautions)


def _groups(part: Part, cases: Sequence[LoadCase], monitor: Monitor) -> list[list[LoadCase]]:
    """Cases held alike, together; nothing but the case is kept, as the arrays are large."""
    if len(cases) < 2:
        return [[case] for case in cases]
    found: dict[str, list[LoadCase]] = {}
    for case in cases:
        monitor.report("assembling loads", done=0, total=0, case=case.name)
        found.setdefault(_ready(part, case).held_alike(), []).append(case)
    return list(found.values())


def solve_cases(
    part: Part,
    load_cases: Sequence[LoadCase],
    *,
    element: str = DEFAULT,
    tol: float = 1e-8,
    maxiter: int = 1000,
    monitor: Monitor = SILENT,
    warm: Mapping[str, StaticResult] | None = None,
    stage: str = "load cases",
) -> dict[str, StaticResult]:
    """Solve several load cases of one part.

    Cases with the same supports, springs, foundations and given motions of plates are solved one
    after the other with one set-up; the set-up of one group is let go before the next is made.

    Parameters
    ----------
    part : Part
    load_cases : sequence of LoadCase
        Their names must differ.
    element, tol, maxiter
        As for `voxelmat.fea.static.solve`.
    monitor : Monitor
        Told of each load case and each iteration; may cancel.
    warm : mapping of str to StaticResult, optional
        Earlier results on the same grid by the name of the load case, to start from.
    stage : str
        What the monitor is told that this is.

    Returns
    -------
    dict of str to StaticResult
        In the order of `load_cases`.

    Raises
    ------
    InputError
        Two cases of one name; else as for `voxelmat.fea.static.solve`.
    ConvergenceError
        With the residual history.
    """
    names = [case.name for case in load_cases]
    twice = sorted({n for n in names if names.count(n) > 1})
    if twice:
        raise InputError(f"Two load cases are called '{twice[0]}'; give each a name of its own.")
    found: dict[str, StaticResult] = {}
    system: LinearSystem | None = None
    for group in _groups(part, load_cases, monitor):
        system = None  # let go of the last group's before the next one's is made
        for case in group:
            monitor.report(stage, done=len(found), total=len(names), case=case.name)
            started = utc_now()
            ready = _ready(part, case)
            if system is None:
                system = _system(part, ready, element, monitor)
            earlier = None if warm is None else warm.get(case.name)
            found[case.name] = _solved(
                part, case, ready, system, earlier, element, tol, maxiter, started
            )
    monitor.report(stage, done=len(names), total=len(names))
    return {name: found[name] for name in names}


def _system(part: Part, ready: _Ready, element: str, monitor: Monitor) -> LinearSystem:
    return LinearSystem(
        ready.lam,
        ready.mu,
        part.grid.spacing,
        ready.acts.held,
        springs=ready.acts.springs,
        beds=ready.acts.beds,
        plates=ready.acts.plates,
        element=element,
        monitor=monitor,
    )


def _best_factor(system: LinearSystem, u: Double, force: Double) -> float:
    """By which a first guess is scaled for the least energy: exact where the load only grew."""
    stiff = float(np.vdot(u, system.apply(u)))
    return float(np.vdot(u, force)) / stiff if stiff > 0 else 1.0


def _solved(
    part: Part,
    case: LoadCase,
    ready: _Ready,
    system: LinearSystem,
    warm: StaticResult | None,
    element: str,
    tol: float,
    maxiter: int,
    started: str,
) -> StaticResult:
    lam, mu, acts, cautions = ready
    force = acts.force
    if acts.free is not None:
        force = force + acts.free.forces(lam, mu, part.grid.spacing, element)
    guess = _first_guess(warm, system.shape)
    if guess is not None and acts.plates is None and not np.any(acts.prescribed):
        guess = _best_factor(system, guess, force) * guess  # a copy: the earlier result stays
    solution = system.solve(
        force,
        x0=guess,
        prescribed=acts.prescribed,
        tol=tol,
        maxiter=maxiter,
    )
    return _result(part, case, element, system, acts, solution, force, lam, mu, cautions, started)

"""The iterations of an optimiser: evaluate, step, report, keep, decide when to stop."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import Cancelled
from voxelmat.model.design_result import IterationRecord
from voxelmat.monitor import SILENT, Monitor
from voxelmat.topopt.criteria import linearised_gap
from voxelmat.units import number

__all__ = ["Evaluation", "Outcome", "Problem", "State", "Stepper", "Stopping", "run"]

Array = NDArray[np.float64]

_GAP_EVERY = 5
_FIRST_OBJECTIVE = 10.0  # moving asymptotes want the objective at about this size
_QUIET = 3  # iterations that must look converged one after another


@dataclass(frozen=True, slots=True, kw_only=True)
class Evaluation:
    """One design's numbers.

    Attributes
    ----------
    F : ndarray, (1 + m,)
        Objective as it is minimised, then constraints over their limits minus 1.
    dF : ndarray, (1 + m, n)
    reported : float
        Objective as it is told to people.
    grey : float
    weight : ndarray, (n,)
        How much a change of each unknown matters.
    cg_iterations : int
    least : float
        No design has an objective below this.
    size : float or None
        What the objective is scaled by; its first value where left out.
    """

    F: Array
    dF: Array
    reported: float
    grey: float
    weight: Array
    cg_iterations: int
    least: float = -math.inf
    size: float | None = None


class Problem(Protocol):
    """What `run` needs to know about a design problem."""

    low: Array
    high: Array

    def sharpness(self, iteration: int) -> float:
        """Of the projection in this iteration."""

    def begin(self, iteration: int, history: tuple[IterationRecord, ...]) -> bool:
        """Prepare an iteration (from 0); whether it asks other functions than the one before.

        What it sets depends on the arguments only, so that a resumed run does the same.
        """

    def settled(self, iteration: int) -> bool:
        """Whether the problem no longer changes from this iteration on."""

    def evaluate(self, x: Array, sharpness: float) -> Evaluation:
        """Values and derivatives at x."""

    def warm_state(self) -> dict[str, Array]:
        """Arrays that the next evaluation starts from."""

    def restore(self, warm: dict[str, Array]) -> None:
        """Put `warm_state` back."""


class Stepper(Protocol):
    """An optimiser; see `MovingAsymptotes`."""

    multipliers: Array
    accepted: bool

    def step(self, x: Array, F: Array, dF: Array) -> Array:
        """The next design."""

    def forget_model(self) -> None:
        """The functions have changed."""

    def state(self) -> dict[str, Array]:
        """All that the next step depends on."""

    def restore(self, state: dict[str, Array]) -> None:
        """Go on from there."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Stopping:
    """When a design counts as converged.

    Attributes
    ----------
    gap : float
        Linearised gap over the scale of the objective.
    gap_of_first : bool
        The scale is the first objective (for one that goes to zero), not the present one.
    change : float
        Mean weighted change of the unknowns, three times running.
    violation : float
    """

    gap: float = 1e-3
    gap_of_first: bool = False
    change: float = 2e-4
    violation: float = 1e-3


@dataclass(slots=True, kw_only=True)
class State:
    """Everything between two iterations; enough to go on to the same bits.

    Attributes
    ----------
    x : ndarray
        The design to evaluate next.
    whole : ndarray
        The last design that was evaluated to the end and not given up for the one before it
        (`x` itself before the first).
    scale : float
        Factor on the objective; 0 before the first evaluation.
    first : float
        First objective.
    history : tuple of IterationRecord
        Each record is about the `whole` of its time: after a step back it repeats the figures of
        the design that was gone back to.
    optimiser, warm : dict
    finished : str
        Reason why it converged; empty while it has not.
    """

    x: Array
    whole: Array
    scale: float = 0.0
    first: float = 0.0
    history: tuple[IterationRecord, ...] = ()
    optimiser: dict[str, Array] = field(default_factory=dict)
    warm: dict[str, Array] = field(default_factory=dict)
    finished: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Outcome:
    """The last whole design and why it is the last."""

    state: State
    reason: str
    converged: bool
    cancelled: bool


def run(
    problem: Problem,
    optimiser: Stepper,
    state: State,
    *,
    iterations: int,
    stopping: Stopping,
    monitor: Monitor = SILENT,
    keep: Callable[[State], None] | None = None,
    keep_every: int = 5,
    seen: Callable[[State], None] | None = None,
) -> Outcome:
    """Iterate from `state` until converged, `iterations` in all are done, or cancelled.

    Parameters
    ----------
    problem : Problem
    optimiser : Stepper
    state : State
        A fresh start, or what an interrupted run kept.
    iterations : int
        Counted from the very first one.
    stopping : Stopping
    monitor : Monitor
        ``report("optimising", ...)`` after each iteration; may raise `Cancelled`.
    keep : callable, optional
        Called with the state every `keep_every` iterations and at the end.
    keep_every : int
    seen : callable, optional
        Called with the state after each iteration.

    Returns
    -------
    Outcome
        Never raises `Cancelled`.
    """
    if state.optimiser:
        optimiser.restore(state.optimiser)
        problem.restore(state.warm)
    reason, converged, cancelled = state.finished, bool(state.finished), False
    kept = -1
    while not reason and len(state.history) < iterations:
        try:
            state = _iteration(problem, optimiser, state, stopping)
            if seen is not None:
                seen(state)
            _tell(monitor, state.history[-1], iterations)
        except Cancelled:
            done = len(state.history)
            reason, cancelled = f"stopped by the user after {done} iterations", True
            break
        reason = _reason(problem, state, stopping)
        if reason:
            state.finished, converged = reason, True
        if keep is not None and len(state.history) % keep_every == 0:
            keep(state)
            kept = len(state.history)
    if keep is not None and kept != len(state.history):
        keep(state)
    return Outcome(
        state=state,
        reason=reason or _ran_out(state, iterations),
        converged=converged,
        cancelled=cancelled,
    )


def _iteration(problem: Problem, optimiser: Stepper, state: State, stopping: Stopping) -> State:
    """One evaluation and one step; `state` itself stays as it was."""
    n = len(state.history)
    sharpness = problem.sharpness(n)
    if problem.begin(n, state.history) and n:
        optimiser.forget_model()
    e = problem.evaluate(state.x, sharpness)
    first = state.first if n else float(e.F[0])
    scale = state.scale or _FIRST_OBJECTIVE / max(e.size or abs(first), 1e-300)
    F, dF = e.F.copy(), e.dF
    F[0] *= scale
    dF[0] *= scale
    new = optimiser.step(state.x, F, dF)
    whole = state.x if optimiser.accepted else state.whole
    gap = float("nan")
    if (n + 1) % _GAP_EVERY == 0 and problem.settled(n) and optimiser.accepted:
        size = abs(first * scale) if stopping.gap_of_first else max(abs(F[0]), 1e-300)
        bound = linearised_gap(whole, problem.low, problem.high, F, dF, optimiser.multipliers)
        gap = float(min(bound, F[0] - e.least * scale) / size)
    moved = e.weight * np.abs(new - whole) / (problem.high - problem.low)
    change = float(moved.sum() / max(float(e.weight.sum()), 1e-300))
    if optimiser.accepted:
        record = IterationRecord(
            iteration=n + 1,
            objective=e.reported,
            violation=float(e.F[1:].max(initial=-1.0)),
            gap=gap,
            grey=e.grey,
            change=change,
            sharpness=sharpness,
            cg_iterations=e.cg_iterations,
        )
    else:
        record = dataclasses.replace(
            state.history[-1], iteration=n + 1, cg_iterations=e.cg_iterations
        )
    return State(
        x=new,
        whole=whole,
        scale=scale,
        first=first,
        history=(*state.history, record),
        optimiser=optimiser.state(),
        warm=problem.warm_state(),
    )


def _tell(monitor: Monitor, r: IterationRecord, total: int) -> None:
    monitor.report(
        "optimising",
        done=r.iteration,
        total=total,
        objective=r.objective,
        violation=r.violation,
        grey=r.grey,
        change=r.change,
        cg_iterations=r.cg_iterations,
    )


def _reason(problem: Problem, state: State, stopping: Stopping) -> str:
    """Why this design is good enough; empty where it is not."""
    last = state.history[-1]
    if not problem.settled(last.iteration - _QUIET) or last.violation > stopping.violation:
        return ""
    if last.gap <= stopping.gap:
        return (
            f"converged after {last.iteration} iterations: the linearised problem could gain at "
            f"most {number(last.gap, 2)} of the objective, {_figures(state)}"
        )
    recent = state.history[-_QUIET:]
    if len(recent) == _QUIET and all(r.change < stopping.change for r in recent):
        return f"no longer changing after {last.iteration} iterations: {_figures(state)}"
    return ""


def _ran_out(state: State, iterations: int) -> str:
    return f"all {iterations} iterations are used: {_figures(state, still='still ')}"


def _figures(state: State, still: str = "") -> str:
    """How far from converged a design is, in words."""
    last = state.history[-1]
    known = [r.gap for r in state.history[-_GAP_EVERY:] if not math.isnan(r.gap)]
    gap = f", linearised gap {number(known[-1], 2)} of the objective" if known else ""
    return (
        f"mean change {still}{number(last.change, 2)} of the range, largest violation "
        f"{number(max(last.violation, 0.0), 2)}, grey level {number(last.grey, 2)}{gap}"
    )

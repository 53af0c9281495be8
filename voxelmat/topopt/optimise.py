"""Optimise the layout of resins and empty space in a part."""

from __future__ import annotations

import dataclasses
import hashlib
import itertools
import time
from collections.abc import Callable, Sequence
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.design_result import DesignResult
from voxelmat.model.design_spec import DesignSpec, TargetDeflection
from voxelmat.model.loadcase import LoadCase
from voxelmat.model.part import Part
from voxelmat.monitor import SILENT, Figure, Monitor
from voxelmat.provenance import Provenance, text_digest, utc_now
from voxelmat.topopt.assemble import assemble
from voxelmat.topopt.checkpoint import read_checkpoint, write_checkpoint
from voxelmat.topopt.finish import finished
from voxelmat.topopt.iterate import Iterate
from voxelmat.topopt.loop import State, Stopping, run
from voxelmat.topopt.method import stepper_of
from voxelmat.topopt.physics import Case
from voxelmat.topopt.problem import start_of
from voxelmat.topopt.setup import layout_problem, unknowns_of
from voxelmat.topopt.staged import in_stages, needs_stages
from voxelmat.topopt.unknowns import Choice

__all__ = ["optimise"]

#: A target's objective goes to zero, so its gap is held against the first value.
_FOR_TARGET = Stopping(gap=1e-7, gap_of_first=True, change=2e-5)
_KEEP_EVERY = 5


def optimise(
    part: Part,
    load_cases: Sequence[LoadCase],
    spec: DesignSpec,
    *,
    monitor: Monitor = SILENT,
    checkpoint: Path | None = None,
    element: str = "icmb",
    watch: Callable[[Iterate], None] | None = None,
    start: NDArray[np.float64] | None = None,
) -> DesignResult:
    """Find where which resin goes and what stays empty.

    Parameters
    ----------
    part : Part
        The shape to design in, and blends of voxels that are kept.
    load_cases : sequence of LoadCase
        Loads must not depend on the design: no body forces, no prescribed displacements.
    spec : DesignSpec
    monitor : Monitor
        ``report("optimising", done=, total=, objective=, violation=, grey=, change=,
        cg_iterations=, time_left_s=)`` after each iteration. `Cancelled` ends the run with its
        last whole design as the result.
    checkpoint : Path, optional
        Written every 5 iterations and at the end. Where the file is there and belongs to this
        problem, the run goes on from it, to the same bits as one that was never interrupted.
    element : str
        Finite element, see `voxelmat.fea`.
    watch : callable, optional
        Given the `Iterate` of each iteration, on the optimiser's thread; it can be kept and made
        into a part later.
    start : ndarray, optional
        Unknowns to begin with, such as `DesignResult.unknowns` of a question that differs only in
        a limit; a checkpoint goes before it.

    Returns
    -------
    DesignResult

    Raises
    ------
    InputError
        If the specification contradicts itself, the part or the loads.
    ConvergenceError
        If the linear solver fails.
    """
    if needs_stages(spec):
        return _staged(part, load_cases, spec, monitor, checkpoint, element, watch)
    started = utc_now()
    progress = _Progress(monitor, spec.iterations)
    problem, notes = layout_problem(part, load_cases, spec, element=element, monitor=progress)
    physics, choice, cases = problem.physics, problem.unknowns.choice, problem.physics.cases
    is_target = isinstance(spec.objective, TargetDeflection)
    if start is None:
        start = start_of(spec, problem.unknowns, problem.bounds)
    elif start.shape != (problem.unknowns.n,):
        raise InputError(
            f"The start holds {start.size} unknowns, this design has {problem.unknowns.n}; it must "
            "come from the same shape, resins and frozen regions."
        )
    digest = _digest(part, spec, cases, element)
    state = None if checkpoint is None else read_checkpoint(checkpoint, digest)
    outcome = run(
        problem,
        stepper_of(spec, problem),
        state or State(x=start, whole=start),
        iterations=spec.iterations,
        stopping=_FOR_TARGET if is_target else Stopping(),
        monitor=progress,
        keep=None if checkpoint is None else lambda s: write_checkpoint(checkpoint, s, digest),
        keep_every=_KEEP_EVERY,
        seen=None if watch is None else _watcher(part, spec, choice, watch),
    )
    physics.quiet()
    result = finished(part, spec, problem, outcome, notes)
    provenance = Provenance(
        inputs={"part": part.digest, "design": spec.digest},
        seed=spec.seed,
        started_utc=started,
        finished_utc=utc_now(),
    )
    return dataclasses.replace(result, provenance=provenance)


def _staged(
    part: Part,
    load_cases: Sequence[LoadCase],
    spec: DesignSpec,
    monitor: Monitor,
    checkpoint: Path | None,
    element: str,
    watch: Callable[[Iterate], None] | None,
) -> DesignResult:
    """Several runs one after the other, each with a checkpoint of its own."""
    runs = itertools.count(1)

    def one(asked: DesignSpec, like: DesignResult | None) -> DesignResult:
        n = next(runs)
        kept = None if checkpoint is None else checkpoint.with_stem(f"{checkpoint.stem}-run{n}")
        start = None
        if like is not None:
            problem, _ = layout_problem(part, load_cases, asked, element=element)
            density = np.ascontiguousarray(like.density.T, dtype=np.float64)
            fractions = np.ascontiguousarray(like.fractions.transpose(0, 3, 2, 1), dtype=np.float64)
            start = problem.unknowns.like(density, fractions)
        return optimise(
            part, load_cases, asked, monitor=monitor, checkpoint=kept, element=element,
            watch=watch, start=start,
        )  # fmt: skip

    return in_stages(part, spec, one)


def _watcher(
    part: Part, spec: DesignSpec, choice: Choice, watch: Callable[[Iterate], None]
) -> Callable[[State], None]:
    """Hands on each design; parts are made by unknowns of its own, which the run does not use."""
    own = unknowns_of(part, spec, choice)

    def make(x: NDArray[np.float64], sharpness: float) -> Part:
        own.sharpness = sharpness
        return assemble(part, own, own.forward(x), spec.levels)[0]

    return lambda state: watch(Iterate(state.history[-1], state.whole, make))


class _Progress:
    """Passes reports on; what the solver says becomes a repetition of the optimiser's figures.

    So a long solve can be cancelled and shows that it is alive, but the stage stays the same.
    """

    def __init__(self, inner: Monitor, total: int) -> None:
        self._inner, self._total, self._done = inner, total, 0
        self._figures: dict[str, Figure] = {}
        self._began: tuple[float, int] | None = None

    def report(self, stage: str, *, done: int, total: int, **figures: Figure) -> None:
        if stage == "optimising":
            now = time.monotonic()
            if self._began is None:
                self._began = now, done - 1  # the first iteration of this run is not timed
            since, before = self._began
            if done > before + 1:
                each = (now - since) / (done - before - 1)
                figures["time_left_s"] = round(each * (total - done), 1)
            self._total, self._done, self._figures = total, done, figures
        self._inner.report("optimising", done=self._done, total=self._total, **self._figures)


def _digest(part: Part, spec: DesignSpec, cases: tuple[Case, ...], element: str) -> str:
    """Names the problem that a checkpoint belongs to."""
    code = hashlib.sha256(text_digest([part.digest, spec.digest, element]).encode())
    for case in cases:
        code.update(f"{case.name} {case.weight!r}".encode())
        for array in (case.force, case.fixed, case.springs):
            if array is not None:
                code.update(np.ascontiguousarray(array).tobytes())
    return code.hexdigest()

"""Optimise the layout of resins and empty space in a part."""

from __future__ import annotations

import dataclasses
import hashlib
from collections.abc import Callable, Sequence
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from voxelmat.model.design_result import ConstraintValue, DesignResult
from voxelmat.model.design_spec import DesignSpec, TargetDeflection
from voxelmat.model.loadcase import LoadCase
from voxelmat.model.part import Part
from voxelmat.monitor import SILENT, Figure, Monitor
from voxelmat.provenance import Provenance, text_digest, utc_now
from voxelmat.topopt.assemble import assemble
from voxelmat.topopt.cases import as_arrays
from voxelmat.topopt.checkpoint import read_checkpoint, write_checkpoint
from voxelmat.topopt.criteria import OptimalityCriteria
from voxelmat.topopt.domain import build_choice, resin_numbers
from voxelmat.topopt.interpolation import VoidLaw
from voxelmat.topopt.iterate import Iterate
from voxelmat.topopt.loop import Outcome, State, Stepper, Stopping, run
from voxelmat.topopt.mma import MovingAsymptotes
from voxelmat.topopt.physics import Case, Physics
from voxelmat.topopt.problem import (
    LayoutProblem,
    limits_of,
    objective_of,
    start_of,
    suits_criteria,
)
from voxelmat.topopt.unknowns import Choice, Fields, Palette, Unknowns

__all__ = ["layout_problem", "optimise"]

#: Linear solver tolerance while a design is still changing, and for the figures at the end.
_RUNNING = {"compliance": 1e-3, "target": 1e-5}
_FINAL = 1e-6
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
        cg_iterations=)`` after each iteration. `Cancelled` ends the run with its last whole
        design as the result.
    checkpoint : Path, optional
        Written every 5 iterations and at the end. Where the file is there and belongs to this
        problem, the run goes on from it, to the same bits as one that was never interrupted.
    element : str
        Finite element, see `voxelmat.fea`.
    watch : callable, optional
        Given the `Iterate` of each iteration, on the optimiser's thread; it can be kept and made
        into a part later.

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
    started = utc_now()
    progress = _Progress(monitor, spec.iterations)
    problem, notes = layout_problem(part, load_cases, spec, element=element, monitor=progress)
    physics, choice, cases = problem.physics, problem.unknowns.choice, problem.physics.cases
    is_target = isinstance(spec.objective, TargetDeflection)
    physics.tolerance = _RUNNING["target" if is_target else "compliance"]
    start = start_of(spec, problem.unknowns, problem.bounds)
    digest = _digest(part, spec, cases, element)
    state = None if checkpoint is None else read_checkpoint(checkpoint, digest)
    outcome = run(
        problem,
        _stepper(spec, problem),
        state or State(x=start, whole=start),
        iterations=spec.iterations,
        stopping=_FOR_TARGET if is_target else Stopping(),
        monitor=progress,
        keep=None if checkpoint is None else lambda s: write_checkpoint(checkpoint, s, digest),
        keep_every=_KEEP_EVERY,
        seen=None if watch is None else _watcher(part, spec, choice, watch),
    )
    physics.quiet()
    result = _result(part, spec, problem, outcome, notes)
    provenance = Provenance(
        inputs={"part": part.digest, "design": spec.digest},
        seed=spec.seed,
        started_utc=started,
        finished_utc=utc_now(),
    )
    return dataclasses.replace(result, provenance=provenance)


def layout_problem(
    part: Part,
    load_cases: Sequence[LoadCase],
    spec: DesignSpec,
    *,
    element: str = "icmb",
    monitor: Monitor = SILENT,
) -> tuple[LayoutProblem, tuple[str, ...]]:
    """The design problem of a specification on a part, and what was frozen without being asked.

    Raises
    ------
    InputError
        As `optimise`.
    """
    cases = as_arrays(part, load_cases)
    choice, notes = build_choice(part, spec, cases)
    unknowns = _unknowns(part, spec, choice)
    physics = Physics(cases, part.grid.spacing, element=element, monitor=monitor)
    problem = LayoutProblem(
        unknowns,
        physics,
        objective_of(spec, cases),
        limits_of(spec, unknowns, part.grid.voxel_volume),
        spec.projection,
    )
    return problem, notes


def _watcher(
    part: Part, spec: DesignSpec, choice: Choice, watch: Callable[[Iterate], None]
) -> Callable[[State], None]:
    """Hands on each design; parts are made by unknowns of its own, which the run does not use."""
    own = _unknowns(part, spec, choice)

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

    def report(self, stage: str, *, done: int, total: int, **figures: Figure) -> None:
        if stage == "optimising":
            self._total, self._done, self._figures = total, done, figures
        self._inner.report("optimising", done=self._done, total=self._total, **self._figures)


def _unknowns(part: Part, spec: DesignSpec, choice: Choice) -> Unknowns:
    numbers = resin_numbers(part, spec)
    resins = [part.resins[n] for n in numbers]
    palette = Palette(
        names=tuple(m.name for m in resins),
        bulk=np.array([m.bulk for m in resins]),
        shear=np.array([m.shear for m in resins]),
        density=np.array([m.density.value for m in resins]),
        law=part.law,
    )
    void = None
    if spec.void:
        soft = spec.void_stiffness * min(m.E.value for m in resins)
        void = VoidLaw(
            penalty=spec.penalty,
            kind=spec.void_law,
            floor_shear=soft / 2.6,  # nu = 0.3: nothing depends on it
            floor_lame=soft * 0.3 / (1.3 * 0.4),
        )
    return Unknowns(
        choice,
        palette,
        void=void,
        spacing=part.grid.spacing,
        radius=spec.filter_radius,
        threshold=spec.projection.threshold,
    )


def _stepper(spec: DesignSpec, problem: LayoutProblem) -> Stepper:
    criteria = suits_criteria(spec, problem.unknowns)
    if spec.method == "oc" or (spec.method == "auto" and criteria):
        return OptimalityCriteria(problem.low, problem.high, move=spec.move)
    back = "worse" if isinstance(spec.objective, TargetDeflection) else "none"
    return MovingAsymptotes(problem.low, problem.high, move=spec.move, back=back)


def _digest(part: Part, spec: DesignSpec, cases: tuple[Case, ...], element: str) -> str:
    """Names the problem that a checkpoint belongs to."""
    code = hashlib.sha256(text_digest([part.digest, spec.digest, element]).encode())
    for case in cases:
        code.update(f"{case.name} {case.weight!r}".encode())
        for array in (case.force, case.fixed, case.springs):
            if array is not None:
                code.update(np.ascontiguousarray(array).tobytes())
    return code.hexdigest()


def _result(
    part: Part, spec: DesignSpec, problem: LayoutProblem, outcome: Outcome, notes: tuple[str, ...]
) -> DesignResult:
    """Solve the last whole design and its palette once more, closely, and put all together."""
    unknowns, physics = problem.unknowns, problem.physics
    history = outcome.state.history
    unknowns.sharpness = history[-1].sharpness if history else problem.sharpness(0)
    problem.begin(max(len(history) - 1, 0), history)
    fields = unknowns.forward(outcome.state.whole)
    physics.tolerance = _FINAL
    physics.update(fields)
    value = problem.objective.value(physics)[0]
    constraints = tuple(
        ConstraintValue(
            name=b.response.name,
            value=b.response.value(physics)[0],
            limit=b.limit,
            unit=b.response.unit,
        )
        for b in problem.bounds
    )
    new, rounded, error = assemble(part, unknowns, fields, spec.levels)
    physics.update(unknowns.with_fractions(fields, rounded))
    of_palette = problem.objective.value(physics)[0]
    return DesignResult(
        part=new,
        history=history,
        reason=outcome.reason,
        converged=outcome.converged,
        cancelled=outcome.cancelled,
        objective=problem.objective.report(value),
        objective_name=problem.objective.name,
        objective_unit=problem.objective.unit,
        objective_of_palette=problem.objective.report(of_palette),
        palette_error=error,
        constraints=constraints,
        density=np.where(unknowns.choice.kept_mu > 0, 1.0, fields.rho).T.astype(np.float32),
        fractions=np.ascontiguousarray(fields.w, dtype=np.float32).transpose(0, 3, 2, 1),
        notes=(*notes, *_radius_note(part, spec), *_law_notes(fields)),
    )


def _radius_note(part: Part, spec: DesignSpec) -> tuple[str, ...]:
    if spec.filter_radius > min(part.grid.spacing):
        return ()
    return (
        f"The filter radius of {spec.filter_radius:g} mm is not above the smallest spacing, so "
        "nothing is smoothed: designs may show single voxels and depend on the grid.",
    )


def _law_notes(fields: Fields) -> tuple[str, ...]:
    """Where the blend law was held within its bounds, or was not calibrated."""
    notes = []
    clipped, open_ = int(fields.blend.clipped.sum()), int(fields.blend.uncalibrated.sum())
    of = f"of {fields.blend.clipped.size} designed voxels"
    if clipped:
        notes.append(
            f"In {clipped} {of} the blend law was held within the Hashin-Shtrikman bounds."
        )
    if open_:
        notes.append(f"In {open_} {of} the blend has no calibrated curve; logarithms are mixed.")
    return tuple(notes)

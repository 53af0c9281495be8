"""From the last design to a result: a palette as small as its error allows, and what all is worth.

The design is solved once more, closely; so is the part that is made of it, since rounding to a
palette and drawing an outline change every value a little.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import label

from voxelmat.model.design_result import ConstraintValue, DesignResult
from voxelmat.model.design_spec import DesignSpec
from voxelmat.model.design_stages import StagedValue
from voxelmat.model.part import Part
from voxelmat.topopt.assemble import assemble
from voxelmat.topopt.loop import Outcome
from voxelmat.topopt.made import fields_of, values_of_fields
from voxelmat.topopt.prices import prices_of
from voxelmat.topopt.problem import LayoutProblem
from voxelmat.topopt.responses import Response, TargetResponse
from voxelmat.topopt.unknowns import Fields

__all__ = ["finished"]

Array = NDArray[np.float64]

#: Linear solver tolerance for the figures at the end.
_FINAL = 1e-6


@dataclass(frozen=True, slots=True, kw_only=True)
class _Made:
    """A part, the fractions (K, nz, ny, nx) in it, and the largest rounding of one."""

    part: Part
    w: Array
    error: float
    values: Array


def finished(
    part: Part, spec: DesignSpec, problem: LayoutProblem, outcome: Outcome, notes: tuple[str, ...]
) -> DesignResult:
    """Solve the last whole design and its palette once more, closely, and put all together."""
    unknowns, physics = problem.unknowns, problem.physics
    history = outcome.state.history
    unknowns.sharpness = history[-1].sharpness if history else problem.sharpness(0)
    problem.begin(max(len(history) - 1, 0), history)
    fields = unknowns.forward(outcome.state.whole)
    physics.tolerance = _FINAL
    values = values_of_fields(problem, fields)
    prices = prices_of(problem, outcome.state.whole, values) if history else ()
    made, more = _made(part, spec, problem, fields, values)
    of_part = values_of_fields(problem, *fields_of(made.part, problem, fields))
    stages = _stages(problem, values, of_part)
    remarks = tuple(r for s in stages for r in s.remarks)
    return DesignResult(
        part=made.part,
        history=history,
        reason=outcome.reason,
        converged=outcome.converged,
        cancelled=outcome.cancelled,
        objective=float(values[0]),
        objective_name=problem.objective.name,
        objective_unit=problem.objective.unit,
        objective_of_palette=float(made.values[0]),
        palette_error=made.error,
        constraints=tuple(
            ConstraintValue(
                name=b.response.name,
                value=float(v),
                limit=b.limit,
                unit=b.response.unit,
                at_least=b.at_least,
                scale=b.scale,
            )
            for b, v in zip(problem.bounds, values[1:], strict=True)
        ),
        density=np.where(unknowns.choice.kept_mu > 0, 1.0, fields.rho).T.astype(np.float32),
        fractions=np.ascontiguousarray(fields.w, dtype=np.float32).transpose(0, 3, 2, 1),
        notes=(
            *notes,
            *_radius_note(part, spec),
            *_law_notes(fields),
            *_pieces_note(problem, fields),
            *more,
            *remarks,
            *problem.remarks(outcome.state.whole),
        ),
        stages=stages,
        prices=prices,
        unknowns=outcome.state.whole,
    )


def _stages(problem: LayoutProblem, values: Array, of_part: Array) -> tuple[StagedValue, ...]:
    """The objective and every limit, as optimised and as made into a part."""
    asked: list[tuple[Response, str, float | None]] = [
        (problem.objective, "greatest" if problem.goal.maximise else "least", None),
        *(
            (b.response, "at least" if b.at_least else "at most", b.limit)
            for b in problem.bounds
        ),
    ]  # fmt: skip
    return tuple(
        StagedValue(
            name=response.name,
            unit=response.unit,
            sense=sense,
            limit=limit,
            optimised=float(value),
            palette=float(made),
        )
        for (response, sense, limit), value, made in zip(asked, values, of_part, strict=True)
    )


def _made(
    part: Part, spec: DesignSpec, problem: LayoutProblem, fields: Fields, values: Array
) -> tuple[_Made, tuple[str, ...]]:
    """The part with its palette; as few blends as the allowed error lets it have."""
    tried: dict[int, _Made] = {}

    def at(levels: int) -> _Made:
        if levels not in tried:
            new, w, error = assemble(part, problem.unknowns, fields, levels)
            with_palette = problem.unknowns.with_fractions(fields, w)
            found = values_of_fields(problem, with_palette)
            tried[levels] = _Made(part=new, w=w, error=error, values=found)
        return tried[levels]

    most = spec.levels
    allowed = spec.palette_error
    if allowed is None or problem.unknowns.resins == 1:
        return at(most), ()
    relative = isinstance(problem.objective, TargetResponse)

    def good(levels: int) -> bool:
        return _cost(problem, values, at(levels).values, relative) <= allowed

    levels = min(max(problem.unknowns.resins, 2), most)
    while levels < most and not good(levels):
        levels = min(2 * levels, most)
    if not good(levels):
        cost = _cost(problem, values, at(levels).values, relative)
        return at(levels), (
            f"A palette of {levels} blends changes the objective or a limit by {cost:.2g} of it, "
            f"more than the {allowed:g} allowed; allow more levels.",
        )
    low = levels // 2
    while levels - low > max(1, low // 8):
        middle = (low + levels) // 2
        low, levels = (low, middle) if good(middle) else (middle, levels)
    return at(levels), ()


def _cost(problem: LayoutProblem, values: Array, rounded: Array, relative: bool) -> float:
    """Largest harm of rounding: to the objective, or to how far a limit is overstepped."""
    size = 1.0 if relative else max(abs(values[0]), 1e-300)
    worst = abs(rounded[0] - values[0]) / size
    for bound, was, now in zip(problem.bounds, values[1:], rounded[1:], strict=True):
        worst = max(worst, bound.excess(now) - max(bound.excess(was), 0.0))
    return float(worst)


def _pieces_note(problem: LayoutProblem, fields: Fields) -> tuple[str, ...]:
    """Solid that hangs on nothing: it would fall off, or print as a part of its own."""
    solid = (fields.rho > 0.5) | (problem.unknowns.choice.kept_mu > 0)
    numbers, count = label(solid)
    if count < 2:
        return ()
    loose = int(solid.sum() - np.bincount(numbers[solid]).max())
    return (
        f"The solid is {count} pieces that touch in no face; {loose} voxels lie apart from the "
        "largest. Raise the filter radius, the iterations or the volume.",
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

"""From the [optimise] table of a design to what the optimiser is asked for, and the run of it."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.design import LimitEntry, OptimiseEntry
from voxelmat.model.design_result import DesignResult
from voxelmat.model.design_spec import (
    Compliance,
    DesignSpec,
    Limit,
    MassLimit,
    Objective,
    Projection,
    ResinLimit,
    TargetDeflection,
    VolumeLimit,
)
from voxelmat.model.design_stages import shown
from voxelmat.model.part import Part
from voxelmat.monitor import SILENT, Monitor
from voxelmat.topopt.feasibility import check_reach, reachable, worth_checking
from voxelmat.topopt.iterate import Iterate
from voxelmat.topopt.made import values_of_part
from voxelmat.topopt.optimise import optimise
from voxelmat.topopt.starts import ranked_starts
from voxelmat.units import number, quantity
from voxelmat.workflow.asked_measures import goal_of, limit_of
from voxelmat.workflow.asked_rules import rules_of
from voxelmat.workflow.build import Built

__all__ = ["design_spec", "optimised", "shortfalls", "with_printed"]

Bools = NDArray[np.bool_]

#: Share of the objective that rounding to a palette may cost where a design says nothing of it.
_PALETTE_ERROR = 0.01


def optimised(
    built: Built,
    *,
    checkpoint: Path | None = None,
    monitor: Monitor = SILENT,
    watch: Callable[[Iterate], None] | None = None,
    start: NDArray[np.float64] | None = None,
) -> DesignResult:
    """Run the optimisation that the design asks for.

    Parameters
    ----------
    built : Built
    checkpoint : Path, optional
        Where the run keeps its state, and goes on from it.
    monitor : Monitor
    watch : callable, optional
        Given each `voxelmat.topopt.iterate.Iterate`.
    start : ndarray, optional
        Unknowns to begin with, see `voxelmat.topopt.optimise.optimise`.

    Raises
    ------
    InputError
        If the design has no ``[optimise]`` table, or it contradicts itself.
    """
    spec = design_spec(built)
    try:
        doubts: tuple[str, ...] = ()
        if worth_checking(spec) and (checkpoint is None or not checkpoint.exists()):
            doubts = check_reach(reachable(built.part, built.load_cases, spec, monitor=monitor))
        starts = built.design.optimise.rules.get("starts", 1) if built.design.optimise else 1
        if starts > 1 and start is None:
            ranked = ranked_starts(built.part, built.load_cases, spec, starts, monitor=monitor)
            found, doubts = ranked[0], (*doubts, _starts_note(ranked))
        else:
            found = optimise(
                built.part,
                built.load_cases,
                spec,
                monitor=monitor,
                checkpoint=checkpoint,
                watch=watch,
                start=start,
            )
        return replace(found, notes=(*found.notes, *doubts, *shortfalls(found)))
    except InputError as error:
        if error.file is not None:
            raise
        raise InputError(error.message, file=built.design.file_name, key="optimise") from error


def _starts_note(ranked: Sequence[DesignResult]) -> str:
    values = ", ".join(number(r.objective) for r in ranked)
    unit = f" {ranked[0].objective_unit}".rstrip()
    return f"The best of {len(ranked)} starts is taken; {ranked[0].objective_name}: {values}{unit}."


def shortfalls(found: DesignResult) -> tuple[str, ...]:
    """Which limits the design breaks, and by how much."""
    told = []
    for s in found.stages:
        if s.limit is None or s.met(s.optimised):
            continue
        value, unit = shown(s.optimised, s.unit)
        limit, by = shown(s.limit, s.unit)[0], shown(abs(s.optimised - s.limit), s.unit)[0]
        told.append(
            f"The limit on {s.name} is not met: {quantity(value, unit)} against {s.sense} "
            f"{number(limit)}, off by {number(by)}. Loosen it or another limit, or allow more "
            "iterations."
        )
    return tuple(told)


def with_printed(
    built: Built, found: DesignResult, printed: Part, *, monitor: Monitor = SILENT
) -> DesignResult:
    """The result with the value of everything asked as the stack prints it.

    Parameters
    ----------
    built : Built
        That was optimised.
    found : DesignResult
    printed : Part
        Read back from the stack, on the grid of the design.
    monitor : Monitor
    """
    spec = design_spec(built)
    values = values_of_part(built.part, printed, built.load_cases, spec, monitor=monitor)
    stages = tuple(replace(s, printed=float(v)) for s, v in zip(found.stages, values, strict=True))
    before = {r for s in found.stages for r in s.remarks}
    notes = tuple(n for n in found.notes if n not in before)
    return replace(found, stages=stages, notes=(*notes, *(r for s in stages for r in s.remarks)))


def design_spec(built: Built) -> DesignSpec:
    """What the optimiser is asked for, on this part."""
    entry = built.design.optimise
    if entry is None:
        raise InputError(
            "The design has no [optimise] table, so there is nothing to optimise. Add one, or use "
            "'solve' and 'stack', which take the part as it is laid out.",
            file=built.design.file_name,
            key="optimise",
        )
    standard = Projection()
    from_error = entry.levels is None and entry.palette_error is None
    sharpness = (0.0,) if not entry.void and entry.sharpness is None else entry.sharpness
    given = {
        "penalty": entry.penalty,
        "iterations": entry.iterations,
        "levels": entry.levels,
        "palette_error": _PALETTE_ERROR if from_error else entry.palette_error,
        "move": entry.move,
        "method": entry.method,
        "void_law": entry.void_law,
        "protected_depth": entry.protected_depth_mm,
    }
    try:
        rules = {"filter_radius": entry.filter_radius_mm, **rules_of(built, entry.rules)}
        return DesignSpec(
            resins=entry.resins,
            objective=_objective(built, entry),
            limits=(
                *(_limit(limit) for limit in entry.limits),
                *(limit_of(built, limit) for limit in entry.measured),
            ),
            void=entry.void,
            projection=Projection(
                sharpness=standard.sharpness if sharpness is None else sharpness,
                every=entry.sharpness_every or standard.every,
                penalties=tuple(entry.rules.get("penalties", ())),
            ),
            fixed_resin=_fixed(built, entry),
            solid=_union(built, entry.solid),
            empty=_union(built, entry.empty),
            keep=_kept(built, entry),
            protected=_union(built, entry.protected),
            symmetry=entry.symmetry,
            seed=built.design.seed,
            **rules,
            **{k: v for k, v in given.items() if v is not None},  # type: ignore[arg-type]
        )
    except InputError as error:
        if error.file is not None:
            raise
        raise InputError(error.message, file=built.design.file_name, key="optimise") from error


def _objective(built: Built, entry: OptimiseEntry) -> Objective:
    if entry.goal is not None:
        return goal_of(built, entry.goal)
    if entry.objective == "compliance" or entry.target is None:
        return Compliance()
    target = built.resolved.targets[entry.target]
    return TargetDeflection(
        nodes=target.nodes,
        target=target.deflection,
        direction=target.direction,
        load_case=target.load_case,
    )


def _limit(entry: LimitEntry) -> Limit:
    if entry.kind == "mass":
        return MassLimit(mass=entry.at_most * 1e-6)
    if entry.kind == "resin":
        return ResinLimit(resin=entry.resin or "", fraction=entry.at_most)
    return VolumeLimit(fraction=entry.at_most)


def _union(built: Built, names: tuple[str, ...]) -> Bools | None:
    """Voxels of any of the regions; None where none is named."""
    found = None
    for name in names:
        voxels = built.regions[name].voxels(built.part)
        found = voxels if found is None else found | voxels
    return found


def _fixed(built: Built, entry: OptimiseEntry) -> dict[str, Bools]:
    masks: dict[str, Bools] = {}
    for region, resin in entry.fixed:
        voxels = built.regions[region].voxels(built.part)
        masks[resin] = voxels | masks[resin] if resin in masks else voxels
    return masks


def _kept(built: Built, entry: OptimiseEntry) -> Bools | None:
    """What is not designed: named to be kept, or outside the regions that are designed."""
    kept = _union(built, entry.keep)
    inside = _union(built, entry.design_in)
    if inside is None:
        return kept
    outside = built.part.solid & ~inside
    return outside if kept is None else outside | kept

"""Answers while a design is edited: coarse at first, in full when asked for."""

from __future__ import annotations

import time
from collections.abc import Mapping
from dataclasses import dataclass, field, replace

from voxelmat.errors import InputError
from voxelmat.fea.cases import solve_cases
from voxelmat.fea.refine import ErrorEstimate, error_estimate
from voxelmat.fea.resources import check_fits
from voxelmat.model.design import Design
from voxelmat.model.interface import InterfaceSpot
from voxelmat.model.requirement import Verdict
from voxelmat.model.result import StaticResult
from voxelmat.monitor import SILENT, Monitor
from voxelmat.workflow.build import Built, build
from voxelmat.workflow.interfaces import interface_spots
from voxelmat.workflow.shapecache import ShapeCache
from voxelmat.workflow.verdicts import verdicts

__all__ = ["LIVE_VOXELS", "Answers", "answer", "coarse_design", "live_answer"]

#: Voxels of the grid that a live answer is computed on: 48^3.
LIVE_VOXELS = 48**3
#: Of the coarse solve. On the grip, steel against soft elastomer, displacements and stresses were
#: within 3e-6 of those at 1e-8; the coarse grid is off by per cents.
_LIVE_TOLERANCE = 1e-3
#: Tables of a design that change neither the part nor what acts on it.
_BESIDE = ("name", "note", "load_case", "requirement", "target", "optimise", "print")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Answers:
    """What the load cases gave, and the requirements with it.

    Attributes
    ----------
    built : Built
    results : mapping of str to StaticResult
        By load case.
    verdicts : tuple of Verdict
    interfaces : mapping of str to tuple
        Worst places of each pair of resins, by load case.
    errors : mapping of str to ErrorEstimate
        By the voxel size; empty where not asked for.
    coarsening : float
        Voxel edges over those of the design; 1 where it is the design's own grid.
    seconds : float
    """

    built: Built
    results: Mapping[str, StaticResult]
    verdicts: tuple[Verdict, ...]
    interfaces: Mapping[str, tuple[InterfaceSpot, ...]]
    coarsening: float
    seconds: float
    errors: Mapping[str, ErrorEstimate] = field(default_factory=dict)


def coarse_design(design: Design, voxels: int, most: int = LIVE_VOXELS) -> tuple[Design, float]:
    """The design on larger voxels, so that its grid has about `most` of them.

    Parameters
    ----------
    design : Design
    voxels : int
        Of its own grid.
    most : int

    Returns
    -------
    tuple
        The design, and how many times longer its voxels' edges are; 1 where it is small enough.
    """
    if voxels <= most:
        return design, 1.0
    factor = (voxels / most) ** (1 / 3)
    x, y, z = (factor * s for s in design.spacing_mm)
    data = {**design.data, "grid": {**design.data["grid"], "spacing_mm": [x, y, z]}}
    return replace(design, spacing_mm=(x, y, z), data=data), factor


def answer(
    built: Built,
    *,
    coarsening: float = 1.0,
    tol: float = 1e-8,
    with_error: bool = False,
    before: Answers | None = None,
    monitor: Monitor = SILENT,
) -> Answers:
    """Solve every load case of a built design and judge its requirements.

    Parameters
    ----------
    built : Built
    coarsening : float
        Of the grid, for `Answers`.
    tol : float
        Relative residual to reach.
    with_error : bool
        Solve at half resolution too.
    before : Answers, optional
        Of an earlier state of the design, at the same `tol`: load cases that are the same on the
        same part are taken from it, the others start from it.
    monitor : Monitor

    Raises
    ------
    InputError
        If there is no load case, one has no support, or a region is empty.
    ResourceError
        If it would not fit into memory.
    """
    if not built.load_cases:
        raise InputError(
            "The design has no load case, so there is nothing to solve. Add one under Loads: "
            "where it is held, and what acts on it."
        )
    started = time.perf_counter()
    check_fits(built.part)
    kept = {} if before is None else _kept(built, before)
    asked = [case for case in built.load_cases if case.name not in kept]
    warm = None if before is None else before.results
    made = solve_cases(built.part, asked, tol=tol, monitor=monitor, warm=warm)
    results = {c.name: kept.get(c.name) or made[c.name] for c in built.load_cases}
    spots = {n: before.interfaces[n] for n in kept} if before is not None else {}
    spots |= {n: interface_spots(r, built.resolved.bonds) for n, r in made.items()}
    errors = {}
    if with_error:
        errors = {name: error_estimate(r, monitor=monitor) for name, r in results.items()}
    return Answers(
        built=built,
        results=results,
        verdicts=tuple(verdicts(built.resolved, built.part, results)),
        interfaces={name: spots[name] for name in results},
        coarsening=coarsening,
        seconds=time.perf_counter() - started,
        errors=errors,
    )


def _kept(built: Built, before: Answers) -> dict[str, StaticResult]:
    """Earlier results that still hold: load cases that say the same, on the same part."""
    new, old = built.design, before.built.design

    def beside(design: Design) -> object:
        files = {k: v for k, v in design.inputs.items() if k != design.file_name}
        return files, {k: v for k, v in design.data.items() if k not in _BESIDE}

    if beside(new) != beside(old):
        return {}
    earlier = {entry["name"]: entry for entry in old.data.get("load_case", [])}
    return {
        entry["name"]: before.results[entry["name"]]
        for entry in new.data.get("load_case", [])
        if earlier.get(entry["name"]) == entry and entry["name"] in before.results
    }


def live_answer(
    design: Design,
    voxels: int,
    *,
    shapes: ShapeCache | None = None,
    most: int = LIVE_VOXELS,
    before: Answers | None = None,
    monitor: Monitor = SILENT,
) -> Answers:
    """A quick answer on about `most` voxels; see `coarse_design` and `answer`.

    `before` is the last quick answer; what an edit left as it was is not solved again.
    """
    coarse, factor = coarse_design(design, voxels, most)
    built = build(coarse, monitor=monitor, shapes=shapes)
    return answer(built, coarsening=factor, tol=_LIVE_TOLERANCE, before=before, monitor=monitor)

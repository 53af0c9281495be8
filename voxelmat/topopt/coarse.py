"""A start from the design of a grid twice as coarse, which costs an eighth an iteration."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.design_result import DesignResult
from voxelmat.model.design_spec import (
    Compliance,
    DesignSpec,
    MassLimit,
    ResinLimit,
    TargetDeflection,
    VolumeLimit,
)
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.loadcase import LoadCase
from voxelmat.model.part import Part
from voxelmat.monitor import SILENT, Monitor
from voxelmat.topopt.optimise import optimise
from voxelmat.topopt.setup import layout_problem

__all__ = ["coarse_start", "halved"]

Bools = NDArray[np.bool_]
_REACH = 1.5  # coarse voxels that the filter of the coarse design spans at least


def coarse_start(
    part: Part,
    load_cases: Sequence[LoadCase],
    spec: DesignSpec,
    *,
    iterations: int = 40,
    monitor: Monitor = SILENT,
    element: str = "icmb",
) -> NDArray[np.float64]:
    """Unknowns for `optimise`'s `start`, interpolated from an optimised coarser design.

    Parameters
    ----------
    part, load_cases, spec, monitor, element
        As for `optimise`.
    iterations : int
        Of the coarse design.

    Raises
    ------
    InputError
        As `optimise`; for a grid with an odd number of voxels along an axis; and for measures or
        rules that carry masks of their own, which cannot be put on the coarser grid.
    """
    small, asked = halved(part, spec)
    result = optimise(
        small, load_cases, replace(asked, iterations=iterations), monitor=monitor, element=element
    )
    problem, _ = layout_problem(part, load_cases, spec, element=element)
    return problem.unknowns.like(*_spread(result))


def halved(part: Part, spec: DesignSpec) -> tuple[Part, DesignSpec]:
    """The same part and question with voxels of twice the size."""
    g = part.grid
    if any(n % 2 for n in g.shape):
        raise InputError(f"A coarser start needs an even number of voxels an axis; got {g.shape}.")
    _check(spec)
    grid = VoxelGrid(
        shape=(g.shape[0] // 2, g.shape[1] // 2, g.shape[2] // 2),
        spacing=(2 * g.spacing[0], 2 * g.spacing[1], 2 * g.spacing[2]),
        origin=g.origin,
    )
    fill = _children(np.asarray(part.fill, dtype=np.float64))
    labels, fullest = _children(part.labels), fill.argmax(0)
    small = Part(
        grid=grid,
        resins=part.resins,
        palette=part.palette,
        labels=np.take_along_axis(labels, fullest[None], 0)[0],
        occupancy=np.maximum(np.round(255 * fill.mean(0)), fill.max(0) > 0).astype(np.uint8),
        bodies={k: _any(v) for k, v in part.bodies.items()},
        law=part.law,
        name=part.name,
    )
    goal = spec.objective
    if isinstance(goal, TargetDeflection):
        every = (slice(None, None, 2),) * 3
        goal = replace(goal, nodes=goal.nodes[every], target=goal.target[every])
    asked = replace(
        spec,
        objective=goal,
        filter_radius=max(spec.filter_radius, _REACH * max(grid.spacing)),
        fixed_resin={k: _any(v) for k, v in spec.fixed_resin.items()},
        solid=None if spec.solid is None else _any(spec.solid),
        keep=None if spec.keep is None else _any(spec.keep),
        protected=None if spec.protected is None else _any(spec.protected),
        empty=None if spec.empty is None else ~_any(~spec.empty),
    )
    return small, asked


def _check(spec: DesignSpec) -> None:
    simple = isinstance(spec.objective, Compliance | TargetDeflection) and all(
        isinstance(limit, VolumeLimit | MassLimit | ResinLimit) for limit in spec.limits
    )
    if not simple or spec.zones is not None or spec.skin is not None:
        raise InputError(
            "A coarser start can be made for compliance or a target deflection under limits on "
            "volume, mass and resins, without zones or a skin; leave it out for this design."
        )


def _any(mask: Bools) -> Bools:
    """Coarse voxels that hold a marked one."""
    return np.asarray(_children(mask).any(0), dtype=np.bool_)


def _children(values: NDArray[Any]) -> NDArray[Any]:
    """The eight voxels of each coarse one, (8, ...)."""
    return np.array([values[i::2, j::2, k::2] for k in (0, 1) for j in (0, 1) for i in (0, 1)])


def _spread(result: DesignResult) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Densities and fractions of the coarse design on the fine grid, in the solver's order."""
    rho = np.asarray(result.density, dtype=np.float64).T
    w = np.asarray(result.fractions, dtype=np.float64).transpose(0, 3, 2, 1)
    for axis in (0, 1, 2):
        rho, w = np.repeat(rho, 2, axis), np.repeat(w, 2, axis + 1)
    total = w.sum(0)
    # Where the coarse design holds no blend, any will do: such voxels are kept or empty.
    return rho, np.where(total > 0, w / np.where(total > 0, total, 1.0), 1.0 / len(w))

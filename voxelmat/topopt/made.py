"""What a part that was made of a design is worth by the design's own measures."""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import ConvergenceError
from voxelmat.fea.assemble import moduli
from voxelmat.model.design_spec import DesignSpec
from voxelmat.model.loadcase import LoadCase
from voxelmat.model.part import Part
from voxelmat.monitor import SILENT, Monitor
from voxelmat.topopt.problem import LayoutProblem, start_of
from voxelmat.topopt.responses import Amount, Response, told
from voxelmat.topopt.setup import layout_problem
from voxelmat.topopt.unknowns import Fields

__all__ = ["fields_of", "values_of_fields", "values_of_part"]

Array = NDArray[np.float64]


def fields_of(part: Part, problem: LayoutProblem, like: Fields) -> tuple[Fields, Array]:
    """Physical fields of a part on the grid of a design problem.

    Parameters
    ----------
    part : Part
        Made of a design: with a palette, an outline, or as it was printed.
    problem : LayoutProblem
    like : Fields
        Of any design of the problem.

    Returns
    -------
    fields : Fields
        Density is how full a voxel is, of what the shape lets it be, at most 1.
    filled : ndarray, (nz, ny, nx)
        The same without that cap: a print may overfill a voxel at the shape's border.
    """
    unknowns = problem.unknowns
    c, names = unknowns.choice, unknowns.palette.names
    lam, mu = moduli(part)
    if unknowns.void is not None:
        lam = np.where(c.domain, np.maximum(lam, unknowns.void.floor_lame * c.fill), lam)
        mu = np.where(c.domain, np.maximum(mu, unknowns.void.floor_shear * c.fill), mu)
    table = np.array([[b.fraction(n) for b in part.palette] for n in names])
    total = table.sum(0)
    table = np.where(total > 0, table / np.where(total > 0, total, 1.0), 0.0)
    table[0][total == 0] = 1.0
    w = np.where(c.domain, table[:, np.ascontiguousarray(part.labels.T)], 0.0)
    fill = np.ascontiguousarray(part.fill.T, dtype=np.float64)
    filled = np.where(c.domain, fill / np.where(c.fill > 0, c.fill, 1.0), 0.0)
    rho = np.minimum(filled, 1.0)
    p = unknowns.palette
    blend = p.law.evaluate(w[:, c.domain].T, p.bulk, p.shear, resins=names)
    return dataclasses.replace(like, lam=lam, mu=mu, rho=rho, w=w, blend=blend), filled


def values_of_fields(problem: LayoutProblem, fields: Fields, filled: Array | None = None) -> Array:
    """Objective and limited quantities, (1 + m,), as people are told them.

    With `filled`, of a part that was made: nan where it cannot be solved, because drawing its
    outline cut something loose that carries the load.
    """
    physics = problem.physics
    responses: list[Response] = [problem.objective, *(b.response for b in problem.bounds)]
    values = np.empty(len(responses))
    physics.update(fields)
    for n, response in enumerate(responses):
        if filled is not None and isinstance(response, Amount):
            continue
        try:
            values[n] = told(response, physics, response.value(physics)[0])
        except ConvergenceError:
            if filled is None:
                raise
            values[n] = np.nan
    if filled is not None:
        physics.update(dataclasses.replace(fields, rho=filled))
        for n, response in enumerate(responses):
            if isinstance(response, Amount):  # counts volume, and solves nothing
                values[n] = response.report(response.value(physics)[0])
    return values


def values_of_part(
    part: Part,
    made: Part,
    load_cases: Sequence[LoadCase],
    spec: DesignSpec,
    *,
    tolerance: float = 1e-6,
    monitor: Monitor = SILENT,
) -> Array:
    """Solve a part that was made of a design, and read the design's measures off it.

    Parameters
    ----------
    part : Part
        That was designed on.
    made : Part
        On the same grid.
    load_cases, spec
        As for `voxelmat.topopt.optimise.optimise`.
    tolerance : float
        Of the linear solver.
    monitor : Monitor

    Returns
    -------
    ndarray, (1 + m,)
        Objective, then the limited quantities in the order of `DesignResult.stages`.
    """
    problem, _ = layout_problem(part, load_cases, spec, monitor=monitor)
    problem.physics.tolerance = tolerance
    like = problem.unknowns.forward(start_of(spec, problem.unknowns, problem.bounds))
    return values_of_fields(problem, *fields_of(made, problem, like))

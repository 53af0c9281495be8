"""Heat conduction in a part: steady here, over time in `voxelmat.fea.heat_transient`."""

from __future__ import annotations

import numpy as np

from voxelmat.fea.heat_answer import balance_of, flows_at, heat_result, rounding_of
from voxelmat.fea.heat_assemble import assemble_heat, conductivities
from voxelmat.fea.heat_pieces import hinges, kept
from voxelmat.fea.heat_system import HeatSystem
from voxelmat.fea.heat_transient import conduct_over_time
from voxelmat.fea.operator import touched_nodes
from voxelmat.model.heatcase import HeatCase
from voxelmat.model.heatresult import HeatResult
from voxelmat.model.part import Part
from voxelmat.monitor import SILENT, Monitor
from voxelmat.provenance import utc_now

__all__ = ["conduct", "conduct_over_time"]


def conduct(
    part: Part,
    heat_case: HeatCase,
    *,
    tol: float = 1e-9,
    maxiter: int = 1000,
    monitor: Monitor = SILENT,
) -> HeatResult:
    """Solve for the steady temperature.

    Trilinear elements, one a voxel; second order accurate. A partly filled voxel conducts by its
    filled fraction. Films act on nodes (a lumped surface matrix), with the true surface area.

    Parameters
    ----------
    part : Part
        Each of its resins with a conductivity.
    heat_case : HeatCase
    tol : float
        Relative residual to reach.
    maxiter : int
        Most iterations.
    monitor : Monitor
        Told of each iteration; may cancel.

    Returns
    -------
    HeatResult

    Raises
    ------
    InputError
        A resin without conductivity (named), a region without material, nothing that holds the
        temperature, heat into a piece that it cannot leave.
    ConvergenceError
        With the residual history.
    """
    started = utc_now()
    monitor.report("assembling heat", done=0, total=0)
    k = conductivities(part)
    acts = assemble_heat(part, heat_case)
    keep, cautions = kept(part, k > 0, acts)
    touched = touched_nodes(keep)
    acts = acts.within(touched)
    datum = acts.datum
    system = HeatSystem(k * keep, part.grid.spacing, acts.held, film=acts.film(), monitor=monitor)
    heat = acts.heat(datum)
    T, run = system.solve(heat, prescribed=acts.given - datum, tol=tol, maxiter=maxiter)
    surplus = system.apply(T) - heat
    T = np.where(touched, T + datum, np.nan)
    flows = flows_at(acts, T, surplus)
    return heat_result(
        part,
        heat_case,
        T,
        flows,
        stored=0.0,
        balance=balance_of(flows, 0.0, rounding_of(acts, T)),
        iterations=run.iterations,
        residual=run.residual,
        cautions=[*acts.cautions, *cautions, *hinges(keep)],
        started=started,
    )

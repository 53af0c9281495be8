"""Press a rigid body on a part without friction: force, pressure, contact area, N/mm.

Small displacement: forces act along the push, the gap is measured along it on the undeformed true
surface. That is the theory behind the formulas of Hertz and of rigid punches; it holds while the
surfaces in contact slope little against the push.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from voxelmat.errors import ConvergenceError, InputError
from voxelmat.fea.active_set import Contact, Pressed
from voxelmat.fea.contact_job import ContactJob
from voxelmat.fea.element import DEFAULT
from voxelmat.model.contactresult import ContactResult, PressCurve
from voxelmat.model.indenter import Indenter
from voxelmat.model.loadcase import LoadCase, Support
from voxelmat.model.part import Part
from voxelmat.monitor import SILENT, Monitor

__all__ = ["contact", "for_force", "press"]

# Force control ends this near the force; it takes a few steps, so many that more means a fault.
_NEAR, _STEPS = 1e-5, 40


def for_force(pressed: Pressed, wanted: float, first: float) -> Contact:
    """Find the depth with the given force: force rises with depth, so the place is bracketed.

    Parameters
    ----------
    pressed : Pressed
    wanted : float
        N, > 0; met to 1e-5 of it.
    first : float
        Depth to begin with, mm, > 0.

    Raises
    ------
    ConvergenceError
        No depth has the force.
    """
    low, high = 0.0, np.inf
    depth, found = first, None
    misses: list[float] = []
    for _ in range(_STEPS):
        found = pressed.at(depth, found)
        force = found.force
        misses.append(abs(force / wanted - 1.0))
        if misses[-1] <= _NEAR:
            return found
        if force < wanted:
            low = depth
        else:
            high = depth
        if force <= 0 or found.tangent <= 0:
            guess = 4.0 * depth
        elif misses[-1] < 0.2:
            guess = depth + (wanted - force) / found.tangent
        else:
            # Force goes about with a power of depth: 1 for flat bodies, 1.5 for balls.
            power = min(max(depth * found.tangent / force, 0.7), 3.0)
            guess = depth * (wanted / force) ** (1.0 / power)
        if not low < guess < high:
            guess = 0.5 * (low + high) if np.isfinite(high) else 2.0 * depth
        depth = guess
    raise ConvergenceError(
        f"No depth with a force of {wanted:g} N was found in {_STEPS} steps; the last was "
        f"{depth:g} mm. Loads that press the part against the indenter may be larger than that.",
        misses,
    )


def contact(
    part: Part,
    load_case: LoadCase,
    indenter: Indenter,
    *,
    depth_mm: float | None = None,
    force_N: float | None = None,
    element: str = DEFAULT,
    tol: float = 1e-8,
    monitor: Monitor = SILENT,
) -> ContactResult:
    """Press a rigid indenter on a part, to a depth or with a force.

    The gap between the two is that of the true surface: where the part knows its signed distance
    (or the filled fraction of its voxels), heights come from it and not from the edges of voxels.
    Signed distance is kept in sixteenths of a voxel, so depths below that are noise on a curved
    surface.

    Parameters
    ----------
    part : Part
    load_case : LoadCase
        Must hold the part without the indenter; may have loads too.
    indenter : Indenter
    depth_mm : float
        Travel after first touch; give this or `force_N`.
    force_N : float
        Along the push, above 0.
    element : str
        See `voxelmat.fea.element`.
    tol : float
        Relative residual of each linear solve.
    monitor : Monitor

    Returns
    -------
    ContactResult

    Raises
    ------
    InputError
        A part that is not held, an indenter that passes by, an impossible depth or force.
    ConvergenceError
        Where the linear solver fails, the nodes in contact do not settle, or no depth has the
        force.
    """
    if (depth_mm is None) == (force_N is None):
        raise InputError("Give depth_mm or force_N, one of the two.")
    aim = depth_mm if depth_mm is not None else force_N
    if aim is None or not (np.isfinite(aim) and aim > 0):
        raise InputError(f"A depth (mm) or force (N) must be above 0; got {aim}.")
    reach = np.finfo(float).max if depth_mm is None else depth_mm
    job = ContactJob(part, load_case, indenter, reach, element, tol, monitor)
    if depth_mm is not None:
        return job.answer(job.pressed.at(depth_mm))
    first = 0.1 * min(part.grid.spacing)
    return job.answer(for_force(job.pressed, float(aim), first))


def press(
    part: Part,
    supports: Sequence[Support],
    indenter: Indenter,
    depths_mm: Sequence[float],
    *,
    element: str = DEFAULT,
    tol: float = 1e-8,
    monitor: Monitor = SILENT,
) -> PressCurve:
    """Force against depth: press here and read N/mm.

    Parameters
    ----------
    part : Part
    supports : sequence of Support
        Hold the part without the indenter.
    indenter : Indenter
    depths_mm : sequence of float
        After first touch, above 0 and rising.
    element, tol, monitor
        As for `contact`.

    Returns
    -------
    PressCurve

    Raises
    ------
    InputError, ConvergenceError
        As `contact` does.
    """
    depths = np.asarray(depths_mm, dtype=np.float64)
    if depths.ndim != 1 or not len(depths) or not np.isfinite(depths).all():
        raise InputError(f"Give one or more depths in mm; got {list(depths_mm)}.")
    if depths[0] <= 0 or np.any(np.diff(depths) <= 0):
        raise InputError(f"Depths must be above 0 mm and rise; got {list(depths_mm)}.")
    case = LoadCase(name=f"press with {indenter.name}", supports=tuple(supports))
    job = ContactJob(part, case, indenter, float(depths[-1]), element, tol, monitor)
    found: Contact | None = None
    figures = np.empty((4, len(depths)))
    for n, depth in enumerate(depths):
        monitor.report("pressing", done=n, total=len(depths), depth_mm=float(depth))
        found = job.pressed.at(float(depth), found)
        answer = job.answer(found)
        peak = answer.peak_pressure.value
        figures[:, n] = answer.force, answer.tangent, answer.contact_area, peak
    monitor.report("pressing", done=len(depths), total=len(depths))
    return PressCurve(
        depth=depths,
        force=figures[0],
        tangent=figures[1],
        contact_area=figures[2],
        peak_pressure=figures[3],
        last=answer,
    )

"""Solve one load case of a part: small displacement, linear elastic."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from voxelmat.fea.assemble import Assembled, assemble, moduli
from voxelmat.fea.bed_held import bed_caution
from voxelmat.fea.cautions import film_caution, record_cautions, size_cautions
from voxelmat.fea.element import DEFAULT, Spacing
from voxelmat.fea.held import check_held
from voxelmat.fea.operator import touched_nodes
from voxelmat.fea.peaks import staircase_cautions
from voxelmat.fea.plate_held import check_plates_held
from voxelmat.fea.reactions import reactions
from voxelmat.fea.sensitivity import stiffness_forms, strain
from voxelmat.fea.slender import hinge_caution, thin_caution
from voxelmat.fea.stress import largest_principal_strain, largest_rotation, stress
from voxelmat.fea.system import LinearSystem, Solution
from voxelmat.kernels.threads import threads
from voxelmat.model.loadcase import LoadCase
from voxelmat.model.part import Part
from voxelmat.model.result import StaticResult
from voxelmat.monitor import SILENT, Monitor
from voxelmat.provenance import Provenance, utc_now

__all__ = ["solve"]

Double = NDArray[np.float64]

# Applied forces and reactions, or their moments, that miss each other by more get a caution.
_BALANCE = 1e-4


def _without_loose(acts: Assembled, touched: NDArray[np.bool_]) -> Assembled:
    """Take away what acts on nodes of loose pieces."""
    loads = []
    for load in acts.loads:
        keep = touched.ravel()[load.node]
        loads.append(replace(load, node=load.node[keep], force=load.force[keep]))
    return replace(
        acts,
        force=acts.force * touched,
        held=acts.held & touched,
        springs=None if acts.springs is None else acts.springs * touched,
        loads=tuple(loads),
    )


def _loaded(acts: Assembled) -> NDArray[np.bool_]:
    """Nodes where a load other than a body force, a plate or a given displacement acts."""
    out = np.any(acts.held & (acts.prescribed != 0), axis=0)
    if acts.plates is not None:
        out |= acts.plates.mask
    for load in acts.loads:
        if not load.follows_mass:
            out.ravel()[load.node[np.any(load.force != 0, axis=1)]] = True
    return np.asarray(out)


def _mean_displacement(acts: Assembled, u: Double) -> dict[str, float]:
    """Mean displacement along each load's resultant, weighted like the load, mm."""
    out = {}
    for load in acts.loads:
        size = float(np.linalg.norm(load.resultant))
        if size > 1e-9 * float(np.abs(load.force).sum()):
            work = float((load.force * u.reshape(3, -1)[:, load.node].T).sum())
            out[load.name] = work / size
    return out


def _first_guess(warm: StaticResult | None, shape: tuple[int, ...]) -> Double | None:
    if warm is None or warm.displacement.T.shape != shape:
        return None
    return np.ascontiguousarray(warm.displacement.T)


def _keep_pieces(
    part: Part, case: LoadCase, acts: Assembled, mu: Double
) -> tuple[NDArray[np.bool_], list[str]]:
    """Voxels of the pieces that are held, and cautions; see `check_held`."""
    anchored = acts.held if acts.springs is None else acts.held | (acts.springs > 0)
    if acts.plates is not None:
        check_plates_held(mu > 0, anchored, acts.plates, part.grid)
        anchored = anchored | acts.plates.mask
    everywhere = case.strains or any(load.follows_mass for load in acts.loads)
    return check_held(mu > 0, anchored, _loaded(acts), part.grid, everywhere=everywhere)


def _energy_and_stress(
    acts: Assembled,
    u: Double,
    e: Double,
    lam: Double,
    mu: Double,
    fill: Double,
    spacing: Spacing,
    element: str,
) -> tuple[Double, Double]:
    """Strain energy of each voxel, mJ, and stress in its material, MPa."""
    dlam, dmu = stiffness_forms(u, u, lam, mu, spacing, element)
    # Every coefficient of the element is of first degree in (lam, mu) together (Euler).
    energy = 0.5 * (lam * dlam + mu * dmu)
    free = acts.free
    if free is not None:
        energy += free.energy(u, lam, mu, spacing, element)
    acting = e if free is None else (e - free.mean) * (mu > 0)
    return energy, stress(acting, lam / fill, mu / fill)


def _result(
    part: Part,
    case: LoadCase,
    element: str,
    system: LinearSystem,
    acts: Assembled,
    solution: Solution,
    force: Double,
    lam: Double,
    mu: Double,
    cautions: list[str],
    started: str,
    fields: tuple[Double, Double] | None = None,
) -> StaticResult:
    """Read a solution out; `fields` are energy and stress a voxel, by default isotropic ones."""
    u, grid = solution.u, part.grid
    forces = reactions(grid, case, acts, u, system.apply(u), force)
    fill = np.where(mu > 0, part.fill.T, 1.0).astype(np.float64)
    e = strain(u, grid.spacing) * (mu > 0)
    free = acts.free
    if fields is None:
        fields = _energy_and_stress(acts, u, e, lam, mu, fill, grid.spacing, element)
    energy, s = fields
    strains = e.astype(np.float32).T
    largest = largest_principal_strain(part, strains)
    rotation = largest_rotation(part, u)
    notes = [*cautions, *(c for load in acts.loads for c in load.cautions)]
    notes += size_cautions(largest, rotation)
    notes += film_caution(part, lam, mu) + thin_caution(part) + hinge_caution(part)
    notes += record_cautions(part, case) + bed_caution(acts, grid)
    if forces.balance > _BALANCE:
        notes.append(f"Loads and reactions miss each other by {forces.balance:.1e} of the load.")
    if forces.moment_balance > _BALANCE:
        notes.append(f"Moments miss each other by {forces.moment_balance:.1e} of the largest.")
    result = StaticResult(
        part=part,
        load_case=case,
        displacement=u.T,
        strain=strains,
        stress=s.astype(np.float32).T,
        energy=float(energy.sum()),
        energy_density=(energy / (fill * grid.voxel_volume)).astype(np.float32).T,
        applied=forces.applied,
        reactions=forces.reactions,
        reaction_moments=forces.moments,
        balance=forces.balance,
        moment_balance=forces.moment_balance,
        plates=forces.plates,
        free_strain=None if free is None else (free.mean * (mu > 0)).astype(np.float32).T,
        resultants={load.name: load.resultant for load in acts.loads},
        load_displacement=_mean_displacement(acts, u),
        largest_strain=largest,
        largest_rotation=rotation,
        iterations=solution.iterations,
        residual=solution.residual,
        history=solution.history,
        element=element,
        cautions=tuple(notes),
        provenance=Provenance(
            inputs={"part": part.digest},
            threads=int(threads()),
            started_utc=started,
            finished_utc=utc_now(),
        ),
    )
    return replace(result, cautions=(*notes, *staircase_cautions(result)))


def solve(
    part: Part,
    load_case: LoadCase,
    *,
    element: str = DEFAULT,
    tol: float = 1e-8,
    maxiter: int = 1000,
    monitor: Monitor = SILENT,
    warm: StaticResult | None = None,
) -> StaticResult:
    """Solve one load case.

    Parameters
    ----------
    part : Part
        A partly filled voxel takes part with its material's moduli times the filled fraction.
    load_case : LoadCase
    element : str
        See `voxelmat.fea.element`; the default locks neither in bending nor at nu 0.499.
    tol : float
        Relative residual to reach.
    maxiter : int
        Most iterations.
    monitor : Monitor
        Told of each iteration; may cancel.
    warm : StaticResult, optional
        An earlier result on the same grid to start from.

    Returns
    -------
    StaticResult

    Raises
    ------
    InputError
        A region without material, a part, a plate or a loaded piece that is not held (the message
        names the motions and the place), nothing that acts.
    ConvergenceError
        With the residual history.
    """
    started = utc_now()
    monitor.report("assembling loads", done=0, total=0)
    lam, mu = moduli(part)
    acts = assemble(part, load_case, everything=True)
    keep, cautions = _keep_pieces(part, load_case, acts, mu)
    lam, mu = lam * keep, mu * keep
    acts = _without_loose(acts, touched_nodes(keep))
    force = acts.force
    if acts.free is not None:
        force = force + acts.free.forces(lam, mu, part.grid.spacing, element)
    system = LinearSystem(
        lam,
        mu,
        part.grid.spacing,
        acts.held,
        springs=acts.springs,
        beds=acts.beds,
        plates=acts.plates,
        element=element,
        monitor=monitor,
    )
    solution = system.solve(
        force,
        x0=_first_guess(warm, system.shape),
        prescribed=acts.prescribed,
        tol=tol,
        maxiter=maxiter,
    )
    return _result(
        part, load_case, element, system, acts, solution, force, lam, mu, cautions, started
    )

"""Solve one load case of a part in which some labels are orthotropic."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.assemble import assemble
from voxelmat.fea.element import DEFAULT
from voxelmat.fea.operator import touched_nodes
from voxelmat.fea.orthotropic import OrthotropicSystem
from voxelmat.fea.orthotropic_element import isotropic_constants
from voxelmat.fea.orthotropic_operator import OrthotropicStiffness, comparison, orthotropic_stress
from voxelmat.fea.orthotropic_strain import OrthotropicFreeStrain
from voxelmat.fea.sensitivity import strain
from voxelmat.fea.static import _first_guess, _keep_pieces, _result, _without_loose
from voxelmat.model.loadcase import LoadCase
from voxelmat.model.orthotropic import Orthotropic
from voxelmat.model.part import Part
from voxelmat.model.result import StaticResult
from voxelmat.monitor import SILENT, Monitor
from voxelmat.provenance import text_digest, utc_now

__all__ = ["label_constants", "solve_orthotropic"]

Double = NDArray[np.float64]

# Share of a stiffness outside its nine constants above which the result says so.
_NOTED = 1e-3


def label_constants(part: Part, stiffness: Mapping[int, Orthotropic]) -> Double:
    """Nine constants of every palette entry, MPa, shape (n, 9); isotropic where not in `stiffness`.

    Raises
    ------
    InputError
        A label that the palette does not have, or empty space.
    """
    last = len(part.palette) - 1
    for label in stiffness:
        if not 1 <= int(label) <= last:
            raise InputError(
                f"Label {label} was given an orthotropic stiffness; the palette of part "
                f"'{part.name}' has labels 1 to {last}."
            )
    out = isotropic_constants(*part.palette_lame())
    for label, material in stiffness.items():
        out[int(label)] = material.constants
    return out


def _cautions(part: Part, stiffness: Mapping[int, Orthotropic], thermal: bool) -> list[str]:
    labels = ", ".join(str(n) for n in sorted(stiffness))
    out = [
        f"Labels {labels} are orthotropic. Strengths are those of the resins' records in every "
        f"direction: across layers a print may be weaker."
    ]
    unproven = [str(n) for n in sorted(stiffness) if stiffness[n].indicative]
    if unproven:
        out.append(f"The orthotropic stiffness of labels {', '.join(unproven)} is indicative.")
    out += [
        f"Label {n}: {100 * stiffness[n].off_axis:.2g} % of its stiffness couples shear with the "
        f"rest and is left out."
        for n in sorted(stiffness)
        if stiffness[n].off_axis > _NOTED
    ]
    if thermal:
        out.append(
            "Orthotropic labels expand with heat alike in every direction, as their resins do."
        )
    return out


def solve_orthotropic(
    part: Part,
    load_case: LoadCase,
    stiffness: Mapping[int, Orthotropic],
    *,
    element: str = DEFAULT,
    tol: float = 1e-8,
    maxiter: int = 1000,
    monitor: Monitor = SILENT,
    warm: StaticResult | None = None,
) -> StaticResult:
    """Solve one load case with orthotropic labels.

    Parameters
    ----------
    part : Part
        A partly filled voxel takes part with its stiffness times the filled fraction.
    load_case : LoadCase
    stiffness : mapping of int to Orthotropic
        By palette label; labels that are not there keep their isotropic stiffness.
    element : str
        ``icmb``, ``icm`` or ``full``; see `voxelmat.fea.orthotropic_element`.
    tol, maxiter, monitor, warm
        As for `voxelmat.fea.static.solve`.

    Returns
    -------
    StaticResult
        Its stress and energy are those of the orthotropic stiffness; what is worked out from the
        moduli of its part later (estimates from a coarser grid, say) is not.

    Raises
    ------
    InputError
        As `voxelmat.fea.static.solve`; a label that does not exist.
    ConvergenceError
        With the residual history.
    """
    started = utc_now()
    constants = label_constants(part, stiffness)
    monitor.report("assembling loads", done=0, total=0)
    solid = np.ascontiguousarray(part.solid.T)
    labels = np.where(solid, part.labels.T, 0).astype(np.uint16)
    acts = assemble(part, load_case, everything=True)
    keep, cautions = _keep_pieces(part, load_case, acts, solid.astype(np.float64))
    labels *= keep
    acts = _without_loose(acts, touched_nodes(keep & solid))
    fill = None
    if part.occupancy is not None:
        fill = np.ascontiguousarray(np.where(labels > 0, part.occupancy.T, 0), dtype=np.uint8)
    share = np.ones(labels.shape) if fill is None else fill / 255.0
    spacing = part.grid.spacing
    free = None
    if acts.free is not None:
        free = OrthotropicFreeStrain(acts.free, labels, constants, share, spacing, element)
    force = acts.force if free is None else acts.force + free.forces()
    system = OrthotropicSystem(
        labels,
        constants,
        spacing,
        acts.held,
        fill=fill,
        springs=acts.springs,
        beds=acts.beds,
        plates=acts.plates,
        element=element,
        monitor=monitor,
    )
    found = system.solve(
        force,
        x0=_first_guess(warm, system.shape),
        prescribed=acts.prescribed,
        tol=tol,
        maxiter=maxiter,
    )
    e = strain(found.u, spacing) * (labels > 0)
    energy = OrthotropicStiffness(labels, constants, spacing, element, fill=fill).energy(found.u)
    if free is not None:
        energy += free.energy(found.u)
    s = orthotropic_stress(e if free is None else e - free.mean, labels, constants)
    medium = comparison(constants)
    lam, mu = medium.lam[labels] * share, medium.mu[labels] * share
    cautions += _cautions(part, stiffness, bool(load_case.strains)) if stiffness else []
    result = _result(
        *(part, load_case, element, system, acts, found, force, lam, mu, cautions, started),
        fields=(energy, s),
    )
    told = {str(n): {"C": m.constants.tolist(), "source": m.source} for n, m in stiffness.items()}
    inputs = {**result.provenance.inputs, "orthotropic": text_digest(told)}
    return replace(result, provenance=replace(result.provenance, inputs=inputs))

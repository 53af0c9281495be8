"""A found contact as a static result: stress, strain and energy, for all that reads those."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.fea.assemble import assemble, moduli
from voxelmat.fea.cautions import film_caution, size_cautions
from voxelmat.fea.sensitivity import stiffness_forms, strain
from voxelmat.fea.stress import largest_principal_strain, largest_rotation, stress
from voxelmat.model.contactresult import ContactResult
from voxelmat.model.indenter import direction
from voxelmat.model.result import StaticResult

__all__ = ["static_result"]

Double = NDArray[np.float64]


def static_result(found: ContactResult) -> StaticResult:
    """Stress, strain and energy of a part under an indenter.

    Parameters
    ----------
    found : ContactResult

    Returns
    -------
    StaticResult
        The indenter counts as one more load: its force is among `resultants`, and its depth its
        `load_displacement`. Moments of reactions are left out.
    """
    part, element = found.part, found.element
    spacing = part.grid.spacing
    lam, mu = moduli(part)
    u = np.ascontiguousarray(found.displacement.T)
    free = assemble(part, found.load_case, everything=True).free
    dlam, dmu = stiffness_forms(u, u, lam, mu, spacing, element)
    energy = 0.5 * (lam * dlam + mu * dmu)
    fill = np.where(mu > 0, part.fill.T, 1.0).astype(np.float64)
    e = strain(u, spacing) * (mu > 0)
    elastic = e
    if free is not None:
        energy = energy + free.energy(u, lam, mu, spacing, element)
        elastic = (e - free.mean) * (mu > 0)
    strains = e.astype(np.float32).T
    largest, rotation = largest_principal_strain(part, strains), largest_rotation(part, u)
    pushed = found.force * direction(found.indenter.push)
    name = f"indenter '{found.indenter.name}'"
    applied = np.asarray(found.applied) + pushed
    notes = dict.fromkeys(
        [*found.cautions, *size_cautions(largest, rotation), *film_caution(part, lam, mu)]
    )
    return StaticResult(
        part=part,
        load_case=found.load_case,
        displacement=found.displacement,
        strain=strains,
        stress=stress(elastic, lam / fill, mu / fill).astype(np.float32).T,
        energy=float(energy.sum()),
        energy_density=(energy / (fill * part.grid.voxel_volume)).astype(np.float32).T,
        applied=(float(applied[0]), float(applied[1]), float(applied[2])),
        reactions=found.reactions,
        balance=found.balance,
        resultants={name: (float(pushed[0]), float(pushed[1]), float(pushed[2]))},
        load_displacement={name: found.depth},
        largest_strain=largest,
        largest_rotation=rotation,
        iterations=found.iterations,
        residual=found.residual,
        element=element,
        cautions=tuple(notes),
        free_strain=None if free is None else (free.mean * (mu > 0)).astype(np.float32).T,
        provenance=found.provenance,
    )

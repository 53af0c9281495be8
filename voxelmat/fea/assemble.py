"""A part and a load case as arrays for the solver: moduli, supports, springs, forces."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.bed import Bed, bed_of
from voxelmat.fea.free_strain import FreeStrain, free_strain
from voxelmat.fea.loads import NodalLoad, describe, nodal_load, spread
from voxelmat.fea.plates import PlateSet, bind_plates
from voxelmat.model.loadcase import (
    Foundation,
    GroundSpring,
    InitialStrain,
    LoadCase,
    Support,
    Temperature,
)
from voxelmat.model.part import Part

__all__ = ["Assembled", "assemble", "moduli"]

Double = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class Assembled:
    """Everything that acts on the nodes, arrays ``[3, nz+1, ny+1, nx+1]``.

    Attributes
    ----------
    force : ndarray of float64
        All loads together, forces on plates too, N; without those of free strains.
    held : ndarray of bool
        Where the displacement is given.
    prescribed : ndarray of float64
        The given displacement, mm; 0 elsewhere.
    owner : ndarray of int16
        Which of `supports` holds an unknown, -1 for none.
    springs : ndarray of float64 or None
        To ground, N/mm.
    loads : tuple of NodalLoad
        The forces on plates last; their moments are in `force` alone.
    supports : tuple of str
        Name of each support.
    ground : tuple of (str, ndarray, ndarray)
        Name, flat nodes and stiffness (n, 3) of each spring.
    beds : tuple of Bed
        Elastic foundations; their diagonals are among `springs`.
    plates : PlateSet or None
    free : FreeStrain or None
        Thermal and initial strains.
    """

    force: Double
    held: NDArray[np.bool_]
    prescribed: Double
    owner: NDArray[np.int16]
    springs: Double | None
    loads: tuple[NodalLoad, ...]
    supports: tuple[str, ...]
    ground: tuple[tuple[str, NDArray[np.intp], Double], ...]
    beds: tuple[Bed, ...] = ()
    plates: PlateSet | None = None
    free: FreeStrain | None = None


def moduli(part: Part) -> tuple[Double, Double]:
    """Lame constants of each voxel ``[nz, ny, nx]``, MPa, 0 where it is empty.

    A voxel that is partly filled gets its material's constants times the filled fraction
    (finite-cell scaling): first order accurate at curved surfaces, and the same law for a
    designed and for a printed part.
    """
    lam, mu = part.palette_lame()
    labels = np.ascontiguousarray(part.labels.T)
    lam, mu = lam[labels], mu[labels]
    if part.occupancy is not None:
        fill = np.where(part.solid, part.occupancy, 0).T / 255.0
        lam *= fill
        mu *= fill
    return np.ascontiguousarray(lam), np.ascontiguousarray(mu)


def _supports(
    part: Part, case: LoadCase
) -> tuple[NDArray[np.bool_], Double, NDArray[np.int16], list[str]]:
    nx, ny, nz = part.grid.node_shape
    shape = (3, nz, ny, nx)
    held = np.zeros(shape, dtype=bool)
    given = np.zeros(shape)
    owner = np.full(shape, -1, dtype=np.int16)
    names = []
    for number, support in enumerate(case.supports):
        name = f"support {number + 1} on '{support.region.name}'"
        names.append(name)
        nodes = support.region.nodes(part).T
        if not nodes.any():
            raise InputError(
                f"Load case '{case.name}', {name}: the region holds no node of the part, so it "
                f"would hold nothing. Move or enlarge the region."
            )
        moved = _motion(part, support, nodes)
        for d, value in enumerate(support.displacement):
            if value is None:
                continue
            clash = nodes & held[d]
            clash[clash] = given[d][clash] != moved[d][clash[nodes]]
            if clash.any():
                other = names[int(owner[d][clash][0])]
                raise InputError(
                    f"Load case '{case.name}': {name} gives {moved[d][clash[nodes]][0]:g} mm along "
                    f"{'xyz'[d]} at {int(clash.sum())} nodes that {other} holds at "
                    f"{given[d][clash][0]:g} mm. Keep the regions apart, or give the same "
                    f"displacement."
                )
            new = nodes & ~held[d]
            held[d] |= nodes
            given[d][new] = moved[d][new[nodes]]
            owner[d][new] = number
    return held, given, owner, names


def _motion(part: Part, support: Support, nodes: NDArray[np.bool_]) -> Double:
    """Given displacement at the nodes [k, j, i] of a support, (3, n), mm; 0 where it is free."""
    at = np.nonzero(nodes)[::-1]
    r = np.stack([c[n] for c, n in zip(part.grid.nodes(), at, strict=True)], axis=1)
    turned = np.cross(support.rotation, r - np.asarray(support.about)) if len(r) else r
    moved = [0.0 if v is None else v for v in support.displacement]
    return np.asarray((turned + np.asarray(moved)).T)


def _refuse(case: LoadCase, beds: tuple[Bed, ...]) -> None:
    """Raise where a case holds what only a static solve takes into account."""
    more = [f"plate '{p.name}'" for p in case.plates]
    more += [
        describe(load, n)
        for n, load in enumerate(case.loads, start=1)
        if isinstance(load, Temperature | InitialStrain)
    ]
    more += [f"{b.name} (its surface slopes)" for b in beds if b.leans]
    if more:
        raise InputError(
            f"Load case '{case.name}' has {', '.join(more)}, which this kind of run cannot take "
            f"into account; a static solve can. Leave it out here, or solve the case statically."
        )


def assemble(part: Part, case: LoadCase, *, everything: bool = False) -> Assembled:
    """Turn supports and loads into nodal arrays.

    Parameters
    ----------
    part : Part
    case : LoadCase
    everything : bool
        The caller heeds `beds`, `plates` and `free` too; by default a case that needs them is
        refused, so that nobody leaves them out unawares.

    Raises
    ------
    InputError
        A region without material, two supports that contradict each other.
    """
    held, given, owner, names = _supports(part, case)
    size = held[0].size
    force = np.zeros((3, size))
    elastic = any(isinstance(s, GroundSpring | Foundation) for s in case.loads)
    springs = np.zeros((3, size)) if elastic else None
    loads, ground, beds = [], [], []
    described = [describe(load, n) for n, load in enumerate(case.loads, start=1)]
    for load, name in zip(case.loads, described, strict=True):
        if isinstance(load, Temperature | InitialStrain):
            continue
        if isinstance(load, Foundation) and springs is not None:
            bed = bed_of(part, load, name)
            beds.append(bed)
            for d in range(3):
                springs[d, bed.node] += bed.block[:, d, d]
            continue
        if isinstance(load, GroundSpring):
            node, share = spread(part, load.region, name)
            stiffness = share[:, None] * np.asarray(load.stiffness)
            ground.append((name, node, stiffness))
            if springs is not None:
                for d in range(3):
                    np.add.at(springs[d], node, stiffness[:, d])
            continue
        nodal = nodal_load(part, load, name)
        loads.append(nodal)
        for d in range(3):
            np.add.at(force[d], nodal.node, nodal.force[:, d])
    if not everything:
        _refuse(case, tuple(beds))
    plates = bind_plates(part, case.plates, held, given, names, owner)
    for p in plates.plates if plates is not None else ():
        force[:, p.node] += p.force
        if any(p.plate.force):
            share = p.spread(p.plate.force, (0.0, 0.0, 0.0)).T
            loads.append(NodalLoad(name=p.name, node=p.node, force=share))
    return Assembled(
        force=force.reshape(held.shape),
        held=held,
        prescribed=given,
        owner=owner,
        springs=None if springs is None else springs.reshape(held.shape),
        loads=tuple(loads),
        supports=tuple(names),
        ground=tuple(ground),
        beds=tuple(beds),
        plates=plates,
        free=free_strain(part, case, described),
    )

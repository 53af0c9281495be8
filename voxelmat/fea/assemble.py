"""A part and a load case as arrays for the solver: moduli, supports, springs, forces."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.loads import NodalLoad, describe, nodal_load, spread
from voxelmat.model.loadcase import GroundSpring, LoadCase
from voxelmat.model.part import Part

__all__ = ["Assembled", "assemble", "moduli"]

Double = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class Assembled:
    """Everything that acts on the nodes, arrays ``[3, nz+1, ny+1, nx+1]``.

    Attributes
    ----------
    force : ndarray of float64
        All loads together, N.
    held : ndarray of bool
        Where the displacement is given.
    prescribed : ndarray of float64
        The given displacement, mm; 0 elsewhere.
    owner : ndarray of int16
        Which of `supports` holds an unknown, -1 for none.
    springs : ndarray of float64 or None
        To ground, N/mm.
    loads : tuple of NodalLoad
    supports : tuple of str
        Name of each support.
    ground : tuple of (str, ndarray, ndarray)
        Name, flat nodes and stiffness (n, 3) of each spring.
    """

    force: Double
    held: NDArray[np.bool_]
    prescribed: Double
    owner: NDArray[np.int16]
    springs: Double | None
    loads: tuple[NodalLoad, ...]
    supports: tuple[str, ...]
    ground: tuple[tuple[str, NDArray[np.intp], Double], ...]


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
        for d, value in enumerate(support.displacement):
            if value is None:
                continue
            clash = nodes & held[d] & (given[d] != value)
            if clash.any():
                other = names[int(owner[d][clash][0])]
                raise InputError(
                    f"Load case '{case.name}': {name} gives {value:g} mm along {'xyz'[d]} at "
                    f"{int(clash.sum())} nodes that {other} holds at {given[d][clash][0]:g} mm. "
                    f"Keep the regions apart, or give the same displacement."
                )
            new = nodes & ~held[d]
            held[d] |= nodes
            given[d][new] = value
            owner[d][new] = number
    return held, given, owner, names


def assemble(part: Part, case: LoadCase) -> Assembled:
    """Turn supports and loads into nodal arrays.

    Raises
    ------
    InputError
        A region without material, two supports that contradict each other.
    """
    held, given, owner, names = _supports(part, case)
    size = held[0].size
    force = np.zeros((3, size))
    springs = np.zeros((3, size)) if any(isinstance(s, GroundSpring) for s in case.loads) else None
    loads, ground = [], []
    for number, load in enumerate(case.loads, start=1):
        name = describe(load, number)
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
    return Assembled(
        force=force.reshape(held.shape),
        held=held,
        prescribed=given,
        owner=owner,
        springs=None if springs is None else springs.reshape(held.shape),
        loads=tuple(loads),
        supports=tuple(names),
        ground=tuple(ground),
    )

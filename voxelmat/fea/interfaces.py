"""Normal and shear traction on every face between different resins, against the bonds' strength.

The force that the elements of one resin put on the nodes of its boundary is what crosses it: it is
in balance to the tolerance of the solver, and needs no stress. At a node the force is divided
by the area of the faces that meet there, and a face takes the mean of its four nodes, so that
tractions times areas still sum to the forces exactly. Steps of the voxels are smoothed out the
same way: the mean vector area round a face gives its true normal and its share of the true area.

Where a support, a spring or a surface load acts on a node of the interface itself, nobody can say
which resin bears it. Such a node is left out, component by component; a face with no other node
takes the mean of the stresses in its two voxels.
"""

from __future__ import annotations

from collections.abc import Iterable
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from voxelmat.fea.assemble import Assembled, assemble, moduli
from voxelmat.fea.operator import Stiffness
from voxelmat.model.interface import (
    STEP,
    Bond,
    InterfaceResult,
    dominant_resins,
    find_bond,
)
from voxelmat.model.part import Part
from voxelmat.model.region import solid_nodes
from voxelmat.model.result import StaticResult
from voxelmat.monitor import computing

__all__ = ["interface_tractions"]

Double = NDArray[np.float64]
Bools = NDArray[np.bool_]
Ints = NDArray[np.intp]

# Least share of the staircase that counts as true area; that of a plane through a cube's corners
# is 0.577, and only a feature of single voxels has less.
_LEAST = 0.5
# Forces of all resins at a node that miss balance by more than this share tell of something that
# acts there from outside.
_BALANCE = 0.05
# A face with less true area than this lies on a stepped interface.
_FLAT = 0.98


class _Faces(NamedTuple):
    voxel: Ints
    axis: NDArray[np.int8]
    side: NDArray[np.int16]  # (n, 2) resin on either side
    area: Double
    step: Double  # by how much the blends differ
    node: Ints  # (n, 4) flat nodes, x fastest

    def select(self, keep: Bools) -> _Faces:
        return _Faces(
            self.voxel[keep],
            self.axis[keep],
            self.side[keep],
            self.area[keep],
            self.step[keep],
            self.node[keep],
        )


def _corner_nodes(part: Part, voxel: Ints, axis: int) -> Ints:
    nx, ny, _ = part.grid.node_shape
    stride = (1, nx, nx * ny)
    first = (voxel + np.eye(3, dtype=np.intp)[axis]) @ np.asarray(stride)
    a, b = (stride[d] for d in range(3) if d != axis)
    return np.asarray(first[:, None] + np.array([0, a, b, a + b]))


def _boundaries(part: Part, resin: NDArray[np.int16]) -> _Faces:
    """Faces between solid voxels with different dominant resins."""
    found = []
    fractions = part.palette_fractions()
    fill = part.fill
    for axis in range(3):
        low = tuple(slice(None, -1) if d == axis else slice(None) for d in range(3))
        high = tuple(slice(1, None) if d == axis else slice(None) for d in range(3))
        differ = (resin[low] != resin[high]) & (resin[low] >= 0) & (resin[high] >= 0)
        voxel = np.argwhere(differ)
        a, b = tuple(voxel.T), tuple((voxel + np.eye(3, dtype=np.intp)[axis]).T)
        step = 0.5 * np.abs(fractions[part.labels[a]] - fractions[part.labels[b]]).sum(axis=1)
        area = part.grid.voxel_volume / part.grid.spacing[axis]
        found.append(
            _Faces(
                voxel,
                np.full(len(voxel), axis, np.int8),
                np.stack([resin[a], resin[b]], axis=1),
                area * np.minimum(fill[a], fill[b]).astype(np.float64),
                step,
                _corner_nodes(part, voxel, axis),
            )
        )
    return _Faces(*(np.concatenate(column) for column in zip(*found, strict=True)))


def _nodal_forces(
    result: StaticResult, acts: Assembled, resin: NDArray[np.int16], which: int
) -> Double:
    """Force on each node by the elements of one resin, (nodes, 3), N."""
    spacing, element = result.part.grid.spacing, result.element
    mine = np.ascontiguousarray((resin == which).T)
    lam, mu = (m * mine for m in moduli(result.part))
    work = Stiffness(lam, mu, spacing, element)
    u = np.ascontiguousarray(result.displacement.T)
    out = np.empty_like(u)
    with computing():
        work.apply(u, out)
    if acts.free is not None:
        out -= acts.free.forces(lam, mu, spacing, element)
    return out.reshape(3, -1).T


def _at_nodes(faces: _Faces, mine: Bools, value: Double, count: int) -> Double:
    """Sum a value of some faces at their four nodes, a quarter each."""
    out = np.zeros((count, *value.shape[1:]))
    for corner in range(4):
        np.add.at(out, faces.node[mine, corner], 0.25 * value[mine])
    return out


def _outside(acts: Assembled) -> Bools:
    """Components of nodes where a support, spring, plate or load acts, (nodes, 3); no weight."""
    marked = acts.held.reshape(3, -1).T.copy()
    if acts.springs is not None:
        marked |= acts.springs.reshape(3, -1).T > 0
    if acts.plates is not None:
        marked |= acts.plates.mask.ravel()[:, None]
    for load in acts.loads:
        if not load.follows_mass:
            marked[load.node] |= load.force != 0
    return marked


def _face_mean(nodal: Double, trusted: Bools, nodes: Ints, instead: Double) -> Double:
    """Mean over the trusted nodes of each face, (n, 3); `instead` where none is."""
    good = trusted[nodes]
    count = good.sum(axis=1)
    total = np.where(good, nodal[nodes], 0.0).sum(axis=1)
    return np.where(count > 0, total / np.maximum(count, 1), instead)


def _trusted(outside: Bools, forces: dict[int, Double]) -> Bools:
    """Components of nodes whose forces are those that cross the interface, (nodes, 3)."""
    total = np.sum(list(forces.values()), axis=0)
    size = np.sum([np.abs(f).max(axis=1) for f in forces.values()], axis=0)
    return np.asarray((np.abs(total) <= _BALANCE * size[:, None]) & ~outside)


def _one_side(faces: _Faces, force: Double, which: int) -> tuple[Bools, Double, Double]:
    """For faces of one resin: which, force over area of its nodes, outward vector over area."""
    mine = (faces.side == which).any(axis=1)
    outward = np.zeros((len(faces.axis), 3))
    sign = np.where(faces.side[:, 0] == which, 1.0, -1.0)
    outward[np.arange(len(sign)), faces.axis] = sign * faces.area
    count = len(force)
    area = _at_nodes(faces, mine, faces.area, count)[:, None]
    over = np.divide(1.0, area, out=np.zeros_like(area), where=area > 0)
    direction = over * _at_nodes(faces, mine, outward, count)
    # In balance, what its neighbours put on this resin is what its elements put on the nodes.
    return mine, over * force, direction[faces.node[mine]].mean(axis=1)


def _tractions(
    result: StaticResult, acts: Assembled, resin: NDArray[np.int16], faces: _Faces
) -> tuple[Double, Double]:
    """Traction of the upper on the lower side over the staircase, and vector over scalar area."""
    traction, direction = np.zeros((2, len(faces.axis), 3))
    forces = {int(c): _nodal_forces(result, acts, resin, int(c)) for c in np.unique(faces.side)}
    if not forces:
        return traction, direction
    trusted = _trusted(_outside(acts), forces)
    own = np.eye(3)[faces.axis]
    stressed = 0.5 * _stress_tractions(result, faces.voxel, own)
    stressed += 0.5 * _stress_tractions(result, faces.voxel + own.astype(np.intp), own)
    for which, force in forces.items():
        mine, t, v = _one_side(faces, force, which)
        sign = np.where(faces.side[mine, 0] == which, 0.5, -0.5)[:, None]
        # The mean of what both sides say: they differ by the weight of a voxel, and where a third
        # resin meets the two.
        instead = 2.0 * sign * stressed[mine]
        traction[mine] += sign * _face_mean(t, trusted, faces.node[mine], instead)
        direction[mine] += sign * v
    return traction, direction


def _stress_tractions(result: StaticResult, voxel: Ints, normal: Double) -> Double:
    """Traction on planes through voxel centres, (n, 3), MPa."""
    s = result.stress[tuple(voxel.T)].astype(np.float64)
    rows = ((0, 3, 4), (3, 1, 5), (4, 5, 2))
    return np.stack([(s[:, row] * normal).sum(axis=1) for row in rows], axis=1)


def _edges(part: Part, acts: Assembled, faces: _Faces) -> Bools:
    """Faces with a node on the open surface, or where a support or a surface load acts."""
    padded = np.pad(~part.solid, 1, constant_values=True)
    marked = solid_nodes(padded)[1:-1, 1:-1, 1:-1].ravel(order="F")
    marked = marked | _outside(acts).any(axis=1)
    return np.asarray(marked[faces.node].any(axis=1))


def _uses(
    faces: _Faces, names: tuple[str, ...], bonds: Iterable[Bond], normal: Double, shear: Double
) -> tuple[Double, list[tuple[str, str]], list[Bond]]:
    """Shares of the strength by value, low and high end, (3, n); pairs without; records used."""
    records = tuple(bonds)
    out = np.full((3, len(normal)), np.nan)
    missing, used = [], []
    ordered = np.sort(faces.side, axis=1)
    for a, b in np.unique(ordered, axis=0):
        mine = (ordered == (a, b)).all(axis=1)
        bond = find_bond(records, names[a], names[b])
        if bond is None:
            missing.append((names[a], names[b]))
            continue
        used.append(bond)
        # The least use belongs to the upper end of the strengths.
        for row, side in enumerate(("value", "high", "low")):
            out[row, mine] = bond.utilisation(normal[mine], shear[mine], side)
    return out, missing, used


def interface_tractions(result: StaticResult, bonds: Iterable[Bond] = ()) -> InterfaceResult:
    """Tractions on all faces between different resins.

    Parameters
    ----------
    result : StaticResult
    bonds : iterable of Bond
        Strength records. A pair without one gets tractions but no use of strength, and is named
        in `InterfaceResult.missing`; there is no default strength.

    Returns
    -------
    InterfaceResult
        In a partly filled voxel pair the face has the smaller of both filled fractions as area.
    """
    part = result.part
    resin = np.where(part.solid, dominant_resins(part)[part.labels], np.int16(-1))
    faces = _boundaries(part, resin)
    acts = assemble(part, result.load_case, everything=True)
    traction, direction = _tractions(result, acts, resin, faces)
    sharp = faces.step >= STEP - 1e-9
    faces = faces.select(sharp)
    length = np.linalg.norm(direction[sharp], axis=1)
    own = np.eye(3)[faces.axis]
    normal = np.where(length[:, None] > 1e-6, direction[sharp], own)
    normal /= np.linalg.norm(normal, axis=1)[:, None]
    share = np.maximum(length, _LEAST)
    per_area = traction[sharp] / share[:, None]
    lower = _stress_tractions(result, faces.voxel, normal)
    upper = _stress_tractions(result, faces.voxel + own.astype(np.intp), normal)
    pull = (per_area * normal).sum(axis=1)
    slide = np.linalg.norm(per_area - pull[:, None] * normal, axis=1)
    names = tuple(m.name for m in part.resins)
    use, missing, used = _uses(faces, names, bonds, pull, slide)
    h = np.asarray(part.grid.spacing)
    fill = part.fill
    beyond = faces.voxel + own.astype(np.intp)
    return InterfaceResult(
        resins=names,
        voxel=faces.voxel,
        axis=faces.axis,
        pair=faces.side,
        centre=np.asarray(part.grid.origin) + h * (faces.voxel + 0.5 + 0.5 * own),
        normal_vector=normal,
        area=faces.area * share,
        traction=per_area,
        jump=0.5 * np.linalg.norm(lower - upper, axis=1),
        solid_sides=(fill[tuple(faces.voxel.T)] >= 0.5) & (fill[tuple(beyond.T)] >= 0.5),
        stepped=length < _FLAT,
        at_edge=_edges(part, acts, faces),
        utilisation=use[0],
        utilisation_low=use[1],
        utilisation_high=use[2],
        missing=tuple(missing),
        bonds=tuple(used),
    )

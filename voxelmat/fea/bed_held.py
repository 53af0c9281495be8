"""Which motions of a part an elastic foundation alone hardly resists."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.fea.assemble import Assembled
from voxelmat.fea.held import motion_names
from voxelmat.fea.plates import point_motions
from voxelmat.model.grid import VoxelGrid

__all__ = ["bed_caution"]

Double = NDArray[np.float64]

# A motion resisted by less than this share of the stiffest one hangs on the rounding of normals.
_HARDLY = 0.01


def bed_caution(acts: Assembled, grid: VoxelGrid) -> list[str]:
    """Motions of the whole part that only rounded normals of a bed that slides freely resist.

    A bed along the normals of a ball does not keep it from turning, and one along a slope does
    not keep the part from sliding down. Supports, springs and plates count as holding what they
    act on.
    """
    leaning = [bed for bed in acts.beds if bed.leans]
    if not leaning:
        return []
    shape = acts.held.shape[1:]
    h = np.asarray(grid.spacing)
    size = np.asarray(grid.shape) * h
    gram = np.zeros((6, 6))

    def add(node: NDArray[np.intp], block: Double) -> None:
        kji = np.stack(np.unravel_index(node, shape), axis=1)
        motion = point_motions((kji[:, ::-1] * h - size / 2) / (size.max() / 2))
        part = np.einsum("anp,nab,bnq->pq", motion, block, motion)
        gram[:] += part / max(float(np.trace(part)), 1e-300)

    for bed in acts.beds:
        add(bed.node, bed.block)
    held = acts.held if acts.plates is None else acts.held | acts.plates.mask
    node = np.flatnonzero(held.any(axis=0))
    if len(node):
        add(node, held.reshape(3, -1)[:, node].T[:, :, None] * np.eye(3))
    for _, at, stiffness in acts.ground:
        add(at, stiffness[:, :, None] * np.eye(3))
    values, vectors = np.linalg.eigh(gram)
    free = vectors[:, values < _HARDLY * values[-1]]
    if not free.shape[1]:
        return []
    return [
        f"{', '.join(bed.name for bed in leaning)}: it slides freely along the surface and hardly "
        f"holds {', '.join(motion_names(free))}; how far the part moves so is not reliable. Add a "
        f"support or a spring, or let the foundation act in all directions."
    ]

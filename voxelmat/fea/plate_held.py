"""Do plates hold the pieces of a part, or hang loose together with them?"""

from __future__ import annotations

import numpy as np
import scipy.ndimage
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.held import motion_names
from voxelmat.fea.operator import touched_nodes
from voxelmat.fea.plates import PlateSet, point_motions
from voxelmat.model.grid import VoxelGrid

__all__ = ["check_plates_held"]

Double = NDArray[np.float64]
Bools = NDArray[np.bool_]

# Below this share of the largest one, a direction of the constraints counts as missing.
_RANK = 1e-10


def _rows(r: Double) -> Double:
    """Displacement of points r (n, 3) by six rigid motions, (n, 3, 6)."""
    return point_motions(r).transpose(1, 0, 2)


class _Places:
    """Node places over half the part's size, from its middle, so that all six motions compare."""

    def __init__(self, grid: VoxelGrid) -> None:
        self._h = np.asarray(grid.spacing)
        size = np.asarray(grid.shape) * self._h
        self._middle, self._scale = size / 2, float(size.max()) / 2
        self._origin = np.asarray(grid.origin)

    def at(self, kji: NDArray[np.intp]) -> Double:
        return np.asarray((kji[:, ::-1] * self._h - self._middle) / self._scale)

    def reference(self, point: tuple[float, float, float]) -> Double:
        """The same for a point in mm."""
        return np.asarray((np.asarray(point) - self._origin - self._middle) / self._scale)


def check_plates_held(solid: Bools, anchored: Bools, plates: PlateSet, grid: VoxelGrid) -> None:
    """Refuse plates that, with the pieces joined to them, can move without resistance.

    Parameters
    ----------
    solid : ndarray of bool, shape (nz, ny, nx)
    anchored : ndarray of bool, shape (3, nz+1, ny+1, nx+1)
        Where a support or a spring acts; not counting plates.
    plates : PlateSet
    grid : VoxelGrid

    Raises
    ------
    InputError
        Naming a plate and the motions left to it.
    """
    labels, _ = scipy.ndimage.label(solid)
    places = _Places(grid)
    on_plate = [
        np.stack(np.unravel_index(p.node, plates.mask.shape), axis=1) for p in plates.plates
    ]
    # Pieces that own a node of a plate: the labels of the eight voxels about it.
    padded = np.pad(labels, 1)
    owners = []
    for kji in on_plate:
        corner = [np.array((c >> 2, c >> 1 & 1, c & 1)) for c in range(8)]
        around = [padded[tuple((kji + c).T)] for c in corner]
        owners.append(np.stack(around, axis=1))
    pieces = [int(n) for n in np.unique(np.concatenate([o.ravel() for o in owners])) if n]
    size = 6 * (len(pieces) + len(on_plate))
    gram = np.zeros((size, size))
    for n, piece in enumerate(pieces):
        a = slice(6 * n, 6 * n + 6)
        held = np.argwhere(anchored & touched_nodes(labels == piece))
        rows = _rows(places.at(held[:, 1:]))[np.arange(len(held)), held[:, 0]]
        gram[a, a] += rows.T @ rows
        for m, (kji, owner) in enumerate(zip(on_plate, owners, strict=True)):
            b = slice(6 * (len(pieces) + m), 6 * (len(pieces) + m) + 6)
            mine = _rows(places.at(kji[(owner == piece).any(axis=1)]))
            both = np.einsum("nda,ndb->ab", mine, mine)
            gram[a, a] += both
            gram[b, b] += both
            gram[a, b] -= both
            gram[b, a] -= both
    for m, plate in enumerate(plates.plates):
        b = slice(6 * (len(pieces) + m), 6 * (len(pieces) + m) + 6)
        rows = np.zeros((6, 6))
        rows[:3] = _rows(places.reference(plate.point)[None])[0]
        rows[3:, 3:] = np.eye(3)
        rows = rows[[v is not None for v in plate.plate.given]]
        gram[b, b] += rows.T @ rows
    # A unit diagonal: pieces of many and of few nodes then weigh the same.
    s = 1.0 / np.sqrt(np.maximum(np.diag(gram), 1e-300))
    values, vectors = np.linalg.eigh(gram * np.outer(s, s))
    loose = s[:, None] * vectors[:, values <= _RANK * values[-1]]
    for m, plate in enumerate(plates.plates):
        b = slice(6 * (len(pieces) + m), 6 * (len(pieces) + m) + 6)
        basis, sizes, _ = np.linalg.svd(loose[b], full_matrices=False)
        moving = basis[:, sizes > 1e-6 * max(float(np.abs(loose).max(initial=0.0)), 1e-300)]
        if moving.shape[1]:
            raise InputError(
                f"Plate '{plate.plate.name}' and what it is joined to are not held: "
                f"{', '.join(motion_names(moving))}. Give more of its translation and rotation, "
                f"or hold the part with a support or a spring."
            )

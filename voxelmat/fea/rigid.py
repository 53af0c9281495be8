"""Rigid motions that supports leave to a part, and what keeps a part from having modes at all."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.element import Spacing
from voxelmat.fea.held import find_pieces, motion_names
from voxelmat.model.grid import VoxelGrid

__all__ = ["check_one_body", "rigid_fields", "rigid_motions"]

Double = NDArray[np.float64]
Bools = NDArray[np.bool_]

# Below this share of the largest, a direction of the constraints counts as missing.
_RANK = 1e-10
# Loose pieces named one by one.
_NAMED = 3


def rigid_fields(touched: Bools, spacing: Spacing) -> Double:
    """Translations and rotations as node fields, shape (6, 3, nz+1, ny+1, nx+1).

    Rotations turn about the middle of the touched nodes by 1 rad over their half extent, so that
    all six are of one size; 0 at nodes that touch no material.
    """
    axes = [h * np.arange(n) for h, n in zip(spacing[::-1], touched.shape, strict=True)]
    place = np.meshgrid(*axes, indexing="ij")[::-1]
    where = np.array([p[touched] for p in place])
    centre = (where.min(axis=1) + where.max(axis=1)) / 2
    scale = float(np.ptp(where, axis=1).max()) / 2
    r = [(p - c) / scale for p, c in zip(place, centre, strict=True)]
    out = np.zeros((6, 3, *touched.shape))
    for d in range(3):
        e, f = (d + 1) % 3, (d + 2) % 3
        out[d, d] = 1.0
        # A turn about d moves e by -r_f and f by r_e.
        out[3 + d, e], out[3 + d, f] = -r[f], r[e]
    out *= touched
    return out


def rigid_motions(fields: Double, anchored: Bools) -> tuple[Double, tuple[str, ...]]:
    """Combinations of `rigid_fields` that no anchored unknown resists, and their names.

    Parameters
    ----------
    fields : ndarray, shape (6, 3, nz+1, ny+1, nx+1)
    anchored : ndarray of bool, shape (3, nz+1, ny+1, nx+1)
        Held, or on a spring.

    Returns
    -------
    free : ndarray, shape (r, 3, nz+1, ny+1, nx+1)
    names : tuple of str
    """
    rows = fields[:, anchored]
    if rows.shape[1] == 0:
        return fields, motion_names(np.eye(6))
    values, vectors = np.linalg.eigh(rows @ rows.T)
    mix = vectors[:, values <= _RANK * values[-1]]
    return np.tensordot(mix.T, fields, axes=1), motion_names(mix)


def check_one_body(solid: Bools, anchored: Bools, grid: VoxelGrid) -> None:
    """Refuse an empty part, and one with loose pieces beside others.

    Raises
    ------
    InputError
        Naming the places.
    """
    pieces = find_pieces(solid, anchored, grid)
    if not pieces:
        raise InputError("The part is empty: no voxel holds material.")
    loose = sorted((p for p in pieces if p.missing), key=lambda p: p.voxels)
    if len(pieces) > 1 and loose:
        where = "; ".join(p.place for p in loose[:_NAMED])
        raise InputError(
            f"{len(loose)} of {len(pieces)} pieces of the part are loose, and a loose piece only "
            f"drifts: {where}{'; and others' if len(loose) > _NAMED else ''}. Remove them, join "
            f"them to the rest by a face of a voxel at least, or hold each one."
        )

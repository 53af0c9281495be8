"""Cautions on the shape alone: members one voxel thin, hinges of an edge or a corner."""

from __future__ import annotations

import numpy as np
import scipy.ndimage
from numpy.typing import NDArray

from voxelmat.model.part import Part

__all__ = ["hinge_caution", "hinges", "thin_caution", "thin_voxels"]

Bools = NDArray[np.bool_]


def thin_voxels(solid: Bools) -> Bools:
    """Voxels with nothing on either side along some axis of more than one layer."""
    out = np.zeros(solid.shape, dtype=bool)
    for axis, n in enumerate(solid.shape):
        if n == 1:
            continue  # one layer for all: a plane model, or a plate that the grid was made for
        m = np.moveaxis(
            np.pad(solid, [(int(a == axis), int(a == axis)) for a in range(3)]), axis, 0
        )
        out |= np.moveaxis(m[1:-1] & ~m[:-2] & ~m[2:], 0, axis)
    return out


def _place(part: Part, low: NDArray[np.intp], shift: tuple[float, float, float]) -> str:
    h, origin = part.grid.spacing, part.grid.origin
    at = [o + (n + s) * d for o, n, s, d in zip(origin, low, shift, h, strict=True)]
    return f"({at[0]:.4g}, {at[1]:.4g}, {at[2]:.4g}) mm"


def thin_caution(part: Part) -> list[str]:
    """Members one voxel thin: neither their stiffness nor their stress is well known."""
    thin = thin_voxels(part.solid)
    count = int(thin.sum())
    if not count:
        return []
    where = _place(part, np.argwhere(thin)[0], (0.5, 0.5, 0.5))
    return [
        f"Members one voxel thin ({count} voxels, first near {where}): the grid rounds their "
        f"thickness, and stress in them is one value across. Use voxels that give them 2 layers "
        f"or more."
    ]


def _edge_hinges(solid: Bools, axis: int) -> Bools:
    """Diagonal pairs across an edge along `axis` that no voxel beside them joins."""
    m = np.moveaxis(solid, axis, 2)
    a, b, c, d = m[:-1, :-1], m[1:, :-1], m[:-1, 1:], m[1:, 1:]
    diagonal = (a & d & ~b & ~c) | (b & c & ~a & ~d)
    # Three or four of the four voxels, both of the pair among them, join it in the next layer.
    joins_ad, joins_bc = a & d & (b | c), b & c & (a | d)
    beside = np.zeros_like(diagonal)
    for here, there in ((np.s_[:, :, :-1], np.s_[:, :, 1:]), (np.s_[:, :, 1:], np.s_[:, :, :-1])):
        beside[here] |= np.where(a[here], joins_ad[there], joins_bc[there])
    return np.asarray(diagonal & ~beside)


def _corner_hinges(solid: Bools) -> Bools:
    """Blocks of 2 x 2 x 2 voxels that hold two opposite ones alone."""
    cut = [(slice(None, -1), slice(1, None))] * 3
    block = [solid[tuple(cut[a][n >> a & 1] for a in range(3))] for n in range(8)]
    count = np.sum(block, axis=0, dtype=np.uint8)
    pairs = np.any([block[n] & block[7 - n] for n in range(4)], axis=0)
    return np.asarray((count == 2) & pairs)


def hinges(solid: Bools) -> tuple[list[NDArray[np.intp]], NDArray[np.intp]]:
    """Where voxels hang together by an edge or a corner only.

    Returns
    -------
    edges : list of ndarray of intp, shape (n, 3)
        For edges along x, y and z: the lowest of the four voxels round each.
    corners : ndarray of intp, shape (n, 3)
        The lowest of the eight voxels round each.
    """
    edges = []
    for axis in range(3):
        at = np.argwhere(_edge_hinges(solid, axis))
        first, second = (a for a in range(3) if a != axis)
        ordered = np.empty_like(at)
        ordered[:, first], ordered[:, second], ordered[:, axis] = at.T
        edges.append(ordered)
    return edges, np.argwhere(_corner_hinges(solid))


def _within_a_piece(
    pieces: NDArray[np.integer], at: NDArray[np.intp], axes: tuple[int, ...]
) -> NDArray[np.intp]:
    """Hinges whose two voxels hang together elsewhere; others join pieces, which is said apart."""
    if not len(at):
        return at
    round_it = []
    for n in range(2 ** len(axes)):
        voxel = at.copy()
        for bit, axis in enumerate(axes):
            voxel[:, axis] += n >> bit & 1
        round_it.append(pieces[tuple(voxel.T)])
    piece = np.stack(round_it)
    least = np.where(piece > 0, piece, piece.max() + 1).min(axis=0)
    return np.asarray(at[least == piece.max(axis=0)])


def hinge_caution(part: Part) -> list[str]:
    """Voxels of one piece joined by an edge or a corner only: a hinge the shape may not have."""
    edges, corners = hinges(part.solid)
    pieces, _ = scipy.ndimage.label(part.solid)
    edges = [
        _within_a_piece(pieces, at, tuple(a for a in range(3) if a != axis))
        for axis, at in enumerate(edges)
    ]
    corners = _within_a_piece(pieces, corners, (0, 1, 2))
    count = sum(map(len, edges))
    if not count + len(corners):
        return []
    if count:
        axis = next(a for a in range(3) if len(edges[a]))
        shift = [1.0, 1.0, 1.0]
        shift[axis] = 0.5
        where = _place(part, edges[axis][0], (shift[0], shift[1], shift[2]))
    else:
        where = _place(part, corners[0], (1.0, 1.0, 1.0))
    return [
        f"Material hangs together by an edge or a corner of a voxel only, at {count} edges and "
        f"{len(corners)} corners, first near {where}. Such a place turns like a hinge, and its "
        f"strength is not known: thicken it, or use finer voxels."
    ]

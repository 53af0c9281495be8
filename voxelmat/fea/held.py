"""Is every piece of a part held? Pieces, the rigid motions left to each, and what is loose."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import scipy.ndimage
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.operator import touched_nodes
from voxelmat.model.grid import VoxelGrid

__all__ = ["Piece", "check_held", "find_pieces", "free_motions", "motion_names"]

Double = NDArray[np.float64]
Bools = NDArray[np.bool_]

# Below this share of the largest one, a direction of the constraints counts as missing.
_RANK = 1e-10
# Loose pieces named one by one in a caution.
_NAMED = 3


@dataclass(frozen=True, slots=True, kw_only=True)
class Piece:
    """A set of voxels joined face to face.

    Attributes
    ----------
    voxels : int
    low, high : tuple of float
        Its bounding box, mm.
    volume : float
        Of its voxels, mm^3.
    missing : tuple of str
        Rigid motions that nothing holds.
    loaded : bool
    touches : bool
        It meets another piece along an edge or at a corner, which joins nothing.
    """

    voxels: int
    low: tuple[float, float, float]
    high: tuple[float, float, float]
    volume: float
    missing: tuple[str, ...]
    loaded: bool
    touches: bool

    @property
    def place(self) -> str:
        """Where it lies, in words."""
        box = ", ".join(
            f"{axis} {a:.4g} to {b:.4g}"
            for axis, a, b in zip("xyz", self.low, self.high, strict=True)
        )
        hint = (
            "; it touches another piece only along an edge or at a corner" if self.touches else ""
        )
        return f"{box} mm ({self.voxels} voxels, {self.volume:.3g} mm³{hint})"


def _subspace_names(kind: str, basis: Double) -> list[str]:
    """Name the directions in the span of the orthonormal columns of `basis` (3, m)."""
    inside = [a for a in range(3) if np.linalg.norm(basis[a]) > 0.999]
    preposition = "along" if kind == "translation" else "about"
    names = [f"{kind} {preposition} {'xyz'[a]}" for a in inside]
    rest = basis - np.eye(3)[:, inside] @ basis[inside]
    left = basis.shape[1] - len(inside)
    if left:
        u = np.linalg.svd(rest)[0][:, :left]
        for column in u.T:
            v = np.round(column * np.sign(column[np.argmax(np.abs(column))]), 2) + 0.0
            names.append(f"{kind} {preposition} the direction ({v[0]:.2f}, {v[1]:.2f}, {v[2]:.2f})")
    return names


def motion_names(free: Double) -> tuple[str, ...]:
    """Name rigid motions: columns of (6, m), translation x, y, z then rotation x, y, z."""
    if free.shape[1] == 0:
        return ()
    _, sizes, mix = np.linalg.svd(free[3:])
    turning = int((sizes > 1e-6).sum())
    names: list[str] = []
    if free.shape[1] > turning:
        slides = np.linalg.qr(free[:3] @ mix[turning:].T)[0]
        names += _subspace_names("translation", slides)
    if turning:
        turns = np.linalg.svd(free[3:])[0][:, :turning]
        names += _subspace_names("rotation", turns)
    return tuple(names)


def free_motions(place: Double, component: NDArray[np.intp]) -> Double:
    """Rigid motions that constraints leave free, as orthonormal columns (6, m).

    Parameters
    ----------
    place : ndarray, shape (n, 3)
        Where each constraint acts, in any unit, from any origin.
    component : ndarray, shape (n,)
        Which direction it holds.
    """
    if len(place) == 0:
        return np.eye(6)
    centre = place.mean(axis=0)
    scale = max(float(np.abs(place - centre).max()), 1e-300)
    rows = np.zeros((len(place), 6))
    r = (place - centre) / scale
    n = np.arange(len(place))
    rows[n, component] = 1.0
    # u = w x r: along x it is wy rz - wz ry, and so on round.
    for d in range(3):
        e, f = (d + 1) % 3, (d + 2) % 3
        mine = component == d
        rows[mine, 3 + e] = r[mine, f]
        rows[mine, 3 + f] = -r[mine, e]
    values, vectors = np.linalg.eigh(rows.T @ rows)
    return np.asarray(vectors[:, values <= _RANK * values[-1]])


def _piece(
    mask: Bools, alone: Bools, box: tuple[slice, ...], held: Bools, loaded: Bools, grid: VoxelGrid
) -> Piece:
    """Judge one piece; arrays are cut to its bounding box, nodes to the box's nodes."""
    nodes = touched_nodes(mask)
    constraint = np.argwhere(held & nodes)
    h = np.asarray(grid.spacing)
    place = constraint[:, :0:-1] * h
    low = [grid.origin[a] + box[2 - a].start * h[a] for a in range(3)]
    high = [grid.origin[a] + box[2 - a].stop * h[a] for a in range(3)]
    count = int(mask.sum())
    return Piece(
        voxels=count,
        low=(low[0], low[1], low[2]),
        high=(high[0], high[1], high[2]),
        volume=count * grid.voxel_volume,
        missing=motion_names(free_motions(place, constraint[:, 0])),
        loaded=bool(np.any(loaded & alone)),
        touches=bool(np.any(nodes & ~alone)),
    )


def _pieces(
    solid: Bools, held: Bools, loaded: Bools, grid: VoxelGrid
) -> tuple[NDArray[np.integer], list[Piece]]:
    labels, count = scipy.ndimage.label(solid)
    boxes = scipy.ndimage.find_objects(labels)
    touching = np.zeros(loaded.shape, dtype=np.int32)  # pieces at each node
    if count > 1:
        for n, box in enumerate(boxes, start=1):
            at = tuple(slice(s.start, s.stop + 1) for s in box)
            touching[at] += touched_nodes(labels[box] == n)
    pieces = []
    for n, box in enumerate(boxes, start=1):
        at = tuple(slice(s.start, s.stop + 1) for s in box)
        mask = labels[box] == n
        alone = touched_nodes(mask) & (touching[at] <= 1)
        pieces.append(_piece(mask, alone, box, held[(slice(None), *at)], loaded[at], grid))
    return labels, pieces


def find_pieces(solid: Bools, held: Bools, grid: VoxelGrid) -> list[Piece]:
    """Pieces joined face to face with the motions left to each; arrays as for `check_held`."""
    return _pieces(solid, held, np.zeros(held.shape[1:], dtype=bool), grid)[1]


def _reaches(mask: Bools, nodes: Bools) -> bool:
    return bool(np.any(touched_nodes(mask) & nodes))


def _refuse(unheld: list[Piece], count: int) -> None:
    """Raise for loaded pieces, of `count` in all, that can move."""
    if not unheld:
        return
    worst = max(unheld, key=lambda p: p.voxels)
    kind = "The part" if count == 1 else "A loaded piece of the part"
    more = f" {len(unheld) - 1} more loaded pieces are not held either." if len(unheld) > 1 else ""
    raise InputError(
        f"{kind} is not held: {', '.join(worst.missing)}. It spans {worst.place}. "
        f"Add or enlarge a support or a spring, or join it to a piece that is held.{more}"
    )


def check_held(
    solid: Bools, held: Bools, loaded: Bools, grid: VoxelGrid, *, everywhere: bool = False
) -> tuple[Bools, list[str]]:
    """Find pieces that are not held.

    Parameters
    ----------
    solid : ndarray of bool, shape (nz, ny, nx)
    held : ndarray of bool, shape (3, nz+1, ny+1, nx+1)
        Where a support or a spring acts.
    loaded : ndarray of bool, shape (nz+1, ny+1, nx+1)
        Where a force or a displacement other than 0 acts.
    grid : VoxelGrid
        For places in mm.
    everywhere : bool
        Something acts on all voxels (weight, a temperature): the largest piece then counts as
        loaded, and small loose ones still do not.

    Returns
    -------
    keep : ndarray of bool, shape (nz, ny, nx)
        Voxels of the pieces that are held; the others are loose and carry no load.
    cautions : list of str

    Raises
    ------
    InputError
        Where a loaded piece can move, with the motions and the place; where nothing is loaded.
    """
    labels, pieces = _pieces(solid, held, loaded, grid)
    if not pieces:
        raise InputError("The part is empty: no voxel holds material.")
    if everywhere:
        largest = max(range(len(pieces)), key=lambda n: pieces[n].voxels)
        pieces[largest] = replace(pieces[largest], loaded=True)
    _refuse([p for p in pieces if p.missing and p.loaded], len(pieces))
    touched = touched_nodes(solid)
    if not any(p.loaded for p in pieces) and not np.any(loaded & touched):
        raise InputError(
            "Nothing acts on the part: no force, no displacement other than 0 mm on material."
        )
    loose = [n for n, p in enumerate(pieces) if p.missing]
    keep = solid if not loose else solid & ~np.isin(labels, np.array(loose) + 1)
    # A load where loose pieces meet at an edge belongs to none of them alone, and yet is lost.
    lost = loaded & touched & ~touched_nodes(keep)
    if lost.any():
        _refuse([pieces[n] for n in loose if _reaches(labels == n + 1, lost)], len(pieces))
    cautions = []
    if loose:
        gone = sorted((pieces[n] for n in loose), key=lambda p: -p.voxels)
        volume = sum(p.volume for p in gone)
        where = "; ".join(p.place for p in gone[:_NAMED])
        cautions.append(
            f"{len(gone)} loose pieces ({volume:.3g} mm³) that nothing holds or loads were left "
            f"out, weight included: {where}{'; and others' if len(gone) > _NAMED else ''}."
        )
    kept_touching = [p for p in pieces if p.touches and not p.missing]
    if kept_touching:
        cautions.append(
            f"{len(kept_touching)} held pieces meet another only along edges or at corners; that "
            f"joins them like a hinge: {kept_touching[0].place}."
        )
    return keep, cautions

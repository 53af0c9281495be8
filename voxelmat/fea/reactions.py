"""Forces and moments of supports, springs, foundations and plates, and how well all balance."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from voxelmat.fea.assemble import Assembled
from voxelmat.fea.plates import BoundPlate
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.loadcase import LoadCase
from voxelmat.model.plate import PlateMotion

__all__ = ["Forces", "reactions"]

Double = NDArray[np.float64]
Vector = tuple[float, float, float]


class Forces(NamedTuple):
    """What holds the part; see `voxelmat.model.result.StaticResult`."""

    reactions: dict[str, Vector]
    moments: dict[str, Vector]
    plates: dict[str, PlateMotion]
    applied: Vector
    balance: float
    moment_balance: float


def _vector(v: Double) -> Vector:
    return float(v[0]), float(v[1]), float(v[2])


class _Sum:
    """Adds up nodal forces and their moments."""

    def __init__(self, grid: VoxelGrid) -> None:
        self._axes = grid.nodes()
        self._shape = grid.node_shape[::-1]
        self._middle = 0.5 * (np.asarray(grid.origin) + np.asarray(grid.upper))
        self.force, self.moment = np.zeros(3), np.zeros(3)
        self.force_scale = self.moment_scale = 0.0

    def add(self, node: NDArray[np.intp], force: Double) -> None:
        """Count forces (n, 3) at flat nodes."""
        f, m = self.of(node, force, _vector(self._middle))
        self.force, self.moment = self.force + f, self.moment + m
        self.force_scale = max(self.force_scale, float(np.linalg.norm(f)))
        # A couple of large forces has a moment of their size even where it comes to nothing.
        r = self._place(node) - self._middle
        size = np.linalg.norm(np.cross(r, force), axis=1).sum()
        self.moment_scale = max(self.moment_scale, float(size))

    def _place(self, node: NDArray[np.intp]) -> Double:
        k, j, i = np.unravel_index(node, self._shape)
        return np.stack([c[n] for c, n in zip(self._axes, (i, j, k), strict=True)], axis=1)

    def of(self, node: NDArray[np.intp], force: Double, about: Vector) -> tuple[Double, Double]:
        """Resultant and moment about a point, N and N mm."""
        moment = np.cross(self._place(node) - np.asarray(about), force)
        return force.sum(axis=0), moment.sum(axis=0)


def _plate(bound: BoundPlate, u: Double, pull: Double) -> tuple[PlateMotion, Double]:
    """Motion of a plate with all that it does to the part; and what holds it, (n, 3)."""
    hold = pull.reshape(3, -1)[:, bound.node]
    return bound.motion(u, hold + bound.force), hold.T


def reactions(
    grid: VoxelGrid, case: LoadCase, acts: Assembled, u: Double, inner: Double, applied: Double
) -> Forces:
    """Read forces off a solution.

    Parameters
    ----------
    grid : VoxelGrid
    case : LoadCase
    acts : Assembled
    u : ndarray, shape (3, nz+1, ny+1, nx+1)
        mm.
    inner : ndarray of the same shape
        K u with springs, N.
    applied : ndarray of the same shape
        All nodal forces, those of free strains too, N.
    """
    pull = inner - applied
    size = float(np.linalg.norm(np.asarray(grid.shape) * np.asarray(grid.spacing)))
    found: dict[str, Vector] = {}
    moments: dict[str, Vector] = {}
    total = _Sum(grid)
    acting = np.zeros(3)
    if acts.free is not None:
        # A part that is free to expand has no reactions but rounding; this is what they are of.
        total.force_scale = float(np.abs(applied).max())
        total.moment_scale = total.force_scale * size
    for load in acts.loads:
        total.add(load.node, load.force)
        acting += load.resultant

    def note(name: str, node: NDArray[np.intp], force: Double, about: Vector) -> None:
        f, m = total.of(node, force, about)
        found[name], moments[name] = _vector(f), _vector(m)
        total.add(node, force)

    for number, (name, support) in enumerate(zip(acts.supports, case.supports, strict=True)):
        mine = acts.held & (acts.owner == number)
        node = np.flatnonzero(mine.any(axis=0))
        force = (pull * mine).reshape(3, -1)[:, node].T
        note(name, node, force, support.about)
    for name, node, stiffness in acts.ground:
        note(name, node, -stiffness * u.reshape(3, -1)[:, node].T, (0.0, 0.0, 0.0))
    for bed in acts.beds:
        note(bed.name, bed.node, bed.push(u), (0.0, 0.0, 0.0))
    plates: dict[str, PlateMotion] = {}
    for bound in acts.plates.plates if acts.plates is not None else ():
        plates[bound.plate.name], hold = _plate(bound, u, pull)
        if any(v is not None for v in bound.plate.given):
            note(bound.name, bound.node, hold, bound.point)
        total.add(bound.node, bound.spread((0.0, 0.0, 0.0), bound.plate.moment).T)
    return Forces(
        reactions=found,
        moments=moments,
        plates=plates,
        applied=_vector(acting),
        balance=float(np.linalg.norm(total.force)) / max(total.force_scale, 1e-300),
        moment_balance=float(np.linalg.norm(total.moment)) / max(total.moment_scale, 1e-300),
    )

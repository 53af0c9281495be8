"""Operators of one grid on the packed vector of its free unknowns, for eigenvalue solvers."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from voxelmat.fea.bed import Bed, Coupled
from voxelmat.fea.element import Spacing
from voxelmat.fea.krylov import Operator
from voxelmat.fea.multigrid import Grid, Preconditioner, make_preconditioner
from voxelmat.fea.operator import Stiffness, touched_nodes
from voxelmat.fea.plate_solver import PlatePreconditioner
from voxelmat.fea.plates import PlateSet
from voxelmat.fea.system import first_method
from voxelmat.kernels.threads import crew
from voxelmat.monitor import SILENT, Monitor, computing

__all__ = ["Apply", "Packed"]

Double = NDArray[np.float64]
Apply = Callable[[Double, Double], None]


class Packed:
    """Free unknowns of a grid, its stiffness and a V-cycle, on blocks of vectors (m, n).

    Parameters
    ----------
    lam, mu : ndarray of float64, shape (nz, ny, nx)
        Lame constants, MPa; 0 in empty voxels.
    spacing : tuple of float
        mm.
    held : ndarray of bool, shape (3, nz+1, ny+1, nx+1)
        Unknowns that stay at 0.
    springs : ndarray of float64 or None, shape of `held`
        To ground, N/mm.
    element : str
    beds : tuple of Bed
        Foundations whose diagonals are among the springs.
    plates : PlateSet or None
        Nodes that move rigidly; every product then ends in that space.
    monitor : Monitor
    """

    def __init__(
        self,
        lam: Double,
        mu: Double,
        spacing: Spacing,
        held: NDArray[np.bool_],
        springs: Double | None,
        element: str,
        *,
        beds: tuple[Bed, ...] = (),
        plates: PlateSet | None = None,
        monitor: Monitor = SILENT,
    ) -> None:
        self.shape = held.shape
        touched = touched_nodes(mu > 0)
        held = held & touched
        #: Position of each free unknown in the flattened field.
        self.index = np.flatnonzero(~held & touched)
        self._nodes = int(touched.size)
        K = Stiffness(lam, mu, spacing, element, springs)
        leaning = tuple(bed for bed in beds if bed.leans)
        self._stiffness: Operator = Coupled(K, leaning) if leaning else K
        self._plates = plates
        inner = held if plates is None else held | (plates.mask & touched)
        with computing():
            grid = Grid(lam, mu, spacing, element, inner, touched, springs)
            self._cycle: Preconditioner = make_preconditioner(
                grid, first_method(lam, mu, spacing, inner)
            )
            if plates is not None:
                free = (~held & touched).astype(np.uint8)
                self._cycle = PlatePreconditioner(
                    self._cycle, self._stiffness, plates, free, monitor
                )

    @property
    def size(self) -> int:
        """Number of free unknowns."""
        return int(self.index.size)

    @property
    def has_plates(self) -> bool:
        """Whether some nodes move rigidly."""
        return self._plates is not None

    @property
    def method(self) -> str:
        """Coarse method of the preconditioner."""
        return self._cycle.method

    def field(self, x: Double) -> Double:
        """Packed vector (n,) to a node field ``[3, nz+1, ny+1, nx+1]``, 0 elsewhere."""
        out = np.zeros(self.shape)
        out.ravel()[self.index] = x
        return out

    def pack(self, u: Double) -> Double:
        """Node field to a packed vector."""
        return np.asarray(u.reshape(-1)[self.index])

    def apply(self, product: Apply, X: Double) -> Double:
        """A product of node fields, `product(u, y)`, on each row of a block."""
        out = np.empty(X.shape)
        u, y = np.zeros(self.shape), np.empty(self.shape)
        with computing(), crew(self._nodes):
            for x, row in zip(X, out, strict=True):
                u.ravel()[self.index] = x
                product(u, y)
                if self._plates is not None:
                    self._plates.project(y)
                np.take(y.ravel(), self.index, out=row)
        return out

    def project(self, X: Double) -> Double:
        """Each row with plates moving rigidly."""
        return self.apply(lambda u, y: np.copyto(y, u), X)

    def stiffness(self, X: Double) -> Double:
        """K X, N."""
        return self.apply(self._stiffness.apply, X)

    def precondition(self, X: Double) -> Double:
        """Nearly the inverse of K on each row, by one V-cycle."""
        return self.apply(self._v_cycle, X)

    def _v_cycle(self, r: Double, z: Double) -> None:
        size = float(np.sqrt(np.vdot(r, r)))
        if size == 0.0:
            z[:] = 0.0
            return
        np.multiply(self._cycle.apply(r, 1.0 / size), size, out=z, dtype=np.float64)

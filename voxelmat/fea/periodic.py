"""A linear system with periodic directions: set up once, solved for any number of loads."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import ConvergenceError, InputError
from voxelmat.fea.element import DEFAULT, Spacing
from voxelmat.fea.fold import Periodic, PeriodicStiffness, array_axes, fold, wrap
from voxelmat.fea.krylov import Iteration, conjugate_gradients
from voxelmat.fea.operator import check_moduli, dot
from voxelmat.fea.periodic_multigrid import PeriodicMultigrid
from voxelmat.fea.periodic_pieces import node_groups, periodic_pieces, voxels_at
from voxelmat.fea.system import Solution
from voxelmat.kernels.threads import crew
from voxelmat.monitor import SILENT, Monitor, computing

__all__ = ["PeriodicSystem"]

Double = NDArray[np.float64]

# A load whose sum over a piece is more than this of its size cannot be in balance.
_BALANCE = 1e-6
# Below this share of the scale a load is rounding, and its answer 0.
_NOTHING = 1e-13


class PeriodicSystem:
    """K u = b on a grid of voxels that repeats itself.

    A piece that nothing holds may drift, and the answer is the one whose mean is 0 over the
    piece. Islands, which reach their own copies in no direction and are held nowhere, carry no
    load and are left out.

    Parameters
    ----------
    lam, mu : ndarray of float64, shape (nz, ny, nx)
        Lame constants of each voxel, MPa; both exactly 0 where the voxel is empty.
    spacing : tuple of float
        Voxel edge along x, y, z, mm.
    periodic : tuple of bool
        Which of x, y, z are periodic; at least one.
    fixed : ndarray of bool, shape (3, nz+1, ny+1, nx+1), optional
        Where the displacement along x, y, z is given (0 unless `solve` is told otherwise).
    element : str
        See `voxelmat.fea.element`.
    monitor : Monitor

    Attributes
    ----------
    shape : tuple of int
        Of node fields: (3, nz+1, ny+1, nx+1). Along a periodic axis the last plane repeats the
        first.
    lam, mu : ndarray of float64
        As given, but 0 in the voxels of islands.
    loose : int
        Islands left out.
    loose_voxels : int

    Raises
    ------
    InputError
        Impossible moduli, a bad spacing, no periodic direction, an unknown element.
    """

    def __init__(
        self,
        lam: Double,
        mu: Double,
        spacing: Spacing,
        *,
        periodic: Periodic = (True, True, True),
        fixed: NDArray[np.bool_] | None = None,
        element: str = DEFAULT,
        monitor: Monitor = SILENT,
    ) -> None:
        lam = np.ascontiguousarray(lam, dtype=np.float64)
        mu = np.ascontiguousarray(mu, dtype=np.float64)
        check_moduli(lam, mu)
        if not all(np.isfinite(h) and h > 0 for h in spacing):
            raise InputError(f"The spacing must be above 0 mm; got {spacing}.")
        if len(periodic) != 3 or not any(periodic):
            raise InputError(f"periodic says for each of x, y, z, one at least; got {periodic}.")
        self.shape = (3, *(n + 1 for n in lam.shape))
        self.spacing, self.element, self.periodic = spacing, element, periodic
        self._axes, self._monitor = array_axes(periodic), monitor
        held = self._folded(fixed)
        pieces, ranks = periodic_pieces(mu > 0, periodic)
        anchored = np.unique(pieces[voxels_at(np.any(held, axis=0), periodic)])
        ranks[anchored] = np.maximum(ranks[anchored], 1)
        island = (pieces > 0) & (ranks[pieces] == 0)
        self.loose, self.loose_voxels = int((ranks[1:] == 0).sum()), int(island.sum())
        self.lam, self.mu = np.where(island, 0.0, lam), np.where(island, 0.0, mu)
        self._group = node_groups(self.mu > 0, periodic)
        self._held = held & (self._group > 0)
        self.free = np.ascontiguousarray((self._group > 0) & ~self._held, dtype=np.uint8)
        # By direction and group: does nothing hold it?
        self._drifts = np.ones((3, int(self._group.max()) + 1), dtype=bool)
        self._drifts[:, 0] = False
        for d in range(3):
            self._drifts[d, self._group[self._held[d]]] = False
        self.operator = PeriodicStiffness(self.lam, self.mu, spacing, element, axes=self._axes)
        self._preconditioner: PeriodicMultigrid | None = None

    def _folded(self, fixed: NDArray[np.bool_] | None) -> NDArray[np.bool_]:
        """Held unknowns with those of copies moved to their originals."""
        if fixed is None:
            return np.zeros(self.shape, dtype=bool)
        if fixed.shape != self.shape or fixed.dtype != bool:
            raise InputError(f"fixed must be bool of shape {self.shape}; got {fixed.shape}.")
        held = fixed.copy()
        fold(held, self._axes)
        return held

    @property
    def empty(self) -> bool:
        """Whether nothing is left that could carry a load."""
        return not self._group.any()

    @property
    def nbytes(self) -> int:
        """Memory held between solves, bytes."""
        extra = 0 if self._preconditioner is None else self._preconditioner.nbytes
        return self.operator.nbytes + int(self.free.nbytes + self._group.nbytes) + extra

    def apply_open(self, u: Double) -> Double:
        """K u of one cell cut free, N: last planes count as nodes of their own.

        Parameters
        ----------
        u : ndarray of float64, shape ``shape``
            Any displacement, periodic or not.
        """
        u = np.ascontiguousarray(u, dtype=np.float64)
        if u.shape != self.shape:
            raise InputError(f"u must have shape {self.shape}; got {u.shape}.")
        out = np.empty_like(u)
        with computing(), crew(u[0].size):
            self.operator.apply_open(u, out)
        return out

    def _without_mean(self, u: Double) -> Double:
        """Take each piece's mean off, in place."""
        group = self._group.ravel()
        count = np.maximum(np.bincount(group), 1)
        for d in range(3):
            mean = np.bincount(group, weights=u[d].ravel()) / count
            mean[~self._drifts[d]] = 0.0
            u[d] -= mean[group].reshape(u[d].shape)
        return u

    def _balanced(self, b: Double, scale: float) -> Double:
        """The load on unknowns; `InputError` where it pushes a piece away."""
        folded = b.copy()
        fold(folded, self._axes)
        lost = folded * (self._group == 0)
        size = max(float(np.abs(folded).sum()), scale)
        if float(np.abs(lost).sum()) > _BALANCE * size:
            raise InputError(
                "A load acts on empty space or on an island, which reaches its copies in no "
                "direction: nothing there can carry it."
            )
        folded *= self.free
        group = self._group.ravel()
        for d in range(3):
            pull = np.bincount(group, weights=folded[d].ravel())[self._drifts[d]]
            if np.any(np.abs(pull) > _BALANCE * size):
                raise InputError(
                    f"The load on a piece does not add up to 0 along {'xyz'[d]} (sum "
                    f"{np.abs(pull).max():.3g} N): in a periodic cell nothing holds it."
                )
        return self._without_mean(folded)

    def _ready(self) -> PeriodicMultigrid:
        if self._preconditioner is None:
            self._monitor.report("preparing the solver", done=0, total=0, method="periodic")
            self._preconditioner = PeriodicMultigrid(
                self.lam,
                self.mu,
                self.spacing,
                self.element,
                self.free,
                self._held,
                self.periodic,
            )
        return self._preconditioner

    def solve(
        self,
        b: Double,
        *,
        x0: Double | None = None,
        prescribed: Double | None = None,
        tol: float = 1e-8,
        maxiter: int = 400,
        scale: float = 0.0,
    ) -> Solution:
        """Solve for one load.

        Parameters
        ----------
        b : ndarray of float64, shape ``shape``
            Nodal forces, N. Forces on a last plane are added to the first.
        x0 : ndarray, optional
            First guess, mm.
        prescribed : ndarray, optional
            Displacement at held unknowns, mm; other entries are ignored.
        tol : float
            Residual to reach, relative to the size of the load or to `scale`, if that is larger.
        maxiter : int
            Most iterations.
        scale : float
            A size of forces, N (root of the sum of squares), that makes smaller loads nothing:
            the load of a uniform cell is rounding, and so is its answer.

        Returns
        -------
        Solution
            Periodic; with mean 0 over each piece in directions in which nothing holds it; 0 where
            nothing is.

        Raises
        ------
        InputError
            A load that does not balance on each piece, or acts where nothing carries it.
        ConvergenceError
            With the residual history, when `tol` is out of reach (as for a load that turns a
            fibre about itself, which nothing resists).
        """
        if not (0 < tol < 1 and maxiter >= 1):
            raise InputError(f"tol must lie in 0 to 1 and maxiter be >= 1; got {tol}, {maxiter}.")
        for name, field in (("The load", b), ("x0", x0), ("prescribed", prescribed)):
            if field is not None and not (field.shape == self.shape and np.isfinite(field).all()):
                raise InputError(f"{name} must be finite and of shape {self.shape}.")
        with computing(), crew(b[0].size):
            force = self._balanced(np.asarray(b, dtype=np.float64), scale)
            given = np.zeros(self.shape)
            net = force
            if prescribed is not None:
                np.copyto(given, prescribed, where=self._held)
                net = np.empty(self.shape)
                self.operator.apply(given, net)
                net = (force - net) * self.free
            size = float(np.sqrt(dot(net, net)))
            if size <= _NOTHING * scale or size == 0.0:
                wrap(given, self._axes)
                return Solution(u=given, iterations=0, residual=0.0, history=(0.0,))
            x = given * self._held + (0.0 if x0 is None else x0 * self.free)
            run = conjugate_gradients(
                self.operator,
                self._ready(),
                force,
                self.free,
                Iteration(x),
                norm=max(size, scale),
                tol=tol,
                limit=maxiter,
                monitor=self._monitor,
            )
        if run.state != "converged":
            raise ConvergenceError(
                f"The periodic solver stopped ({run.state}) after {run.iterations} iterations at "
                f"residual {run.residual:.2g} (asked for {tol:.2g}). Raise maxiter or ask for a "
                f"larger tolerance.",
                run.history,
            )
        u = self._without_mean(run.x * (self._group > 0))
        wrap(u, self._axes)
        return Solution(
            u=u, iterations=run.iterations, residual=run.residual, history=tuple(run.history)
        )

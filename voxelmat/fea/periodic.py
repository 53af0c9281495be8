"""A linear system with periodic directions: set up once, solved for any number of loads."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import ConvergenceError, InputError
from voxelmat.fea.element import DEFAULT, Spacing
from voxelmat.fea.fold import Periodic, PeriodicStiffness, array_axes, fold, is_image, wrap
from voxelmat.fea.krylov import Iteration, conjugate_gradients
from voxelmat.fea.operator import check_moduli, dot
from voxelmat.fea.periodic_multigrid import PeriodicMultigrid
from voxelmat.fea.periodic_pieces import periodic_pieces
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

    Nothing is held: each piece may drift, and the answer is the one whose mean is 0 over every
    piece. Islands, which reach their own copies in no direction, carry no load and are left out.

    Parameters
    ----------
    lam, mu : ndarray of float64, shape (nz, ny, nx)
        Lame constants of each voxel, MPa; both exactly 0 where the voxel is empty.
    spacing : tuple of float
        Voxel edge along x, y, z, mm.
    periodic : tuple of bool
        Which of x, y, z are periodic; at least one.
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
        pieces, ranks = periodic_pieces(mu > 0, periodic)
        island = (pieces > 0) & (ranks[pieces] == 0)
        self.loose, self.loose_voxels = int((ranks[1:] == 0).sum()), int(island.sum())
        self.lam, self.mu = np.where(island, 0.0, lam), np.where(island, 0.0, mu)
        self._group = self._groups()
        self.free = np.ascontiguousarray(
            np.broadcast_to(self._group > 0, self.shape), dtype=np.uint8
        )
        self.operator = PeriodicStiffness(self.lam, self.mu, spacing, element, axes=self._axes)
        self._preconditioner: PeriodicMultigrid | None = None

    def _groups(self) -> NDArray[np.int32]:
        """Number of the piece that each node belongs to, ``[k, j, i]``; 0 where none, on copies."""
        labels, _ = periodic_pieces(self.mu > 0, self.periodic, by_nodes=True)
        out = np.zeros(self.shape[1:], dtype=np.int32)
        nz, ny, nx = labels.shape
        for a in range(8):
            at = tuple(
                slice(o, o + n)
                for o, n in zip((a >> 2, a >> 1 & 1, a & 1), (nz, ny, nx), strict=True)
            )
            np.maximum(out[at], labels, out=out[at])
        for axis in self._axes:
            ends = np.moveaxis(out, axis, 0)
            np.maximum(ends[0], ends[-1], out=ends[0])
        out[is_image(out.shape, self._axes)] = 0
        return out

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
            mean[0] = 0.0
            u[d] -= mean[group].reshape(u[d].shape)
        return u

    def _balanced(self, b: Double, scale: float) -> Double:
        """The load on unknowns; `InputError` where it pushes a piece away."""
        folded = b.copy()
        fold(folded, self._axes)
        lost = folded * (1 - self.free)
        size = max(float(np.abs(folded).sum()), scale)
        if float(np.abs(lost).sum()) > _BALANCE * size:
            raise InputError(
                "A load acts on empty space or on an island, which reaches its copies in no "
                "direction: nothing there can carry it."
            )
        folded *= self.free
        group = self._group.ravel()
        for d in range(3):
            pull = np.bincount(group, weights=folded[d].ravel())[1:]
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
                self.lam, self.mu, self.spacing, self.element, self.free, self.periodic
            )
        return self._preconditioner

    def solve(
        self,
        b: Double,
        *,
        x0: Double | None = None,
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
            Periodic, with mean 0 over the nodes of each piece; 0 where nothing is.

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
        for name, field in (("The load", b), ("x0", x0)):
            if field is not None and not (field.shape == self.shape and np.isfinite(field).all()):
                raise InputError(f"{name} must be finite and of shape {self.shape}.")
        with computing(), crew(b[0].size):
            force = self._balanced(np.asarray(b, dtype=np.float64), scale)
            size = float(np.sqrt(dot(force, force)))
            if size <= _NOTHING * scale or size == 0.0:
                return Solution(u=np.zeros(self.shape), iterations=0, residual=0.0, history=(0.0,))
            x = np.zeros(self.shape) if x0 is None else np.array(x0 * self.free)
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
        u = self._without_mean(run.x * self.free)
        wrap(u, self._axes)
        return Solution(
            u=u, iterations=run.iterations, residual=run.residual, history=tuple(run.history)
        )

"""A linear system of one grid of voxels: set up once, solved for any number of loads."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import ConvergenceError, InputError
from voxelmat.fea.bed import Bed, Coupled
from voxelmat.fea.element import DEFAULT, Spacing
from voxelmat.fea.krylov import Iteration, Operator, conjugate_gradients
from voxelmat.fea.lift import rigid_lift
from voxelmat.fea.multigrid import (
    METHODS,
    Grid,
    Preconditioner,
    coarse_held,
    make_preconditioner,
)
from voxelmat.fea.operator import Product, Stiffness, check_moduli, dot, touched_nodes
from voxelmat.fea.plate_solver import PlateOperator, PlatePreconditioner
from voxelmat.fea.plates import PlateSet
from voxelmat.fea.window import Window
from voxelmat.kernels.threads import crew
from voxelmat.monitor import SILENT, Monitor, computing

__all__ = ["LinearSystem", "Solution", "first_method"]

Double = NDArray[np.float64]

# With the cheap coarse levels, go over to the exact ones after this many iterations, or as soon
# as the pace between these two iterations says that it will come to that.
_CHEAP_LIMIT = 45
_PACE = (4, 12)
# Rounding of products, as a share of the force that moves the supports alone.
_NOISE = 1e-14
# Systems up to this many unknowns are factorised after so many iterations with the exact levels.
_DIRECT_UNKNOWNS, _DEAR_LIMIT = 30_000, 200


@dataclass(frozen=True, slots=True, kw_only=True)
class Solution:
    """Displacement of one load.

    Attributes
    ----------
    u : ndarray of float64, shape (3, nz+1, ny+1, nx+1)
        mm; 0 at nodes that touch no material.
    iterations : int
    residual : float
        Size of f - K u over the size of f (less what prescribed displacements take), both on
        free unknowns.
    history : tuple of float
        Relative residual at the start and after each iteration.
    """

    u: Double
    iterations: int
    residual: float
    history: tuple[float, ...]


def _lost_supports(held: NDArray[np.bool_]) -> bool:
    """Whether halving the grid would lose most held unknowns of some direction."""
    kept = coarse_held(held, 1)
    return any(int(kept[d].sum()) * 16 < int(held[d].sum()) for d in range(3))


def _share_of_jumps(mu: Double) -> float:
    """Share of the faces between voxels with material across which mu changes over 100 times."""
    faces = jumps = 0
    for axis in range(3):
        along = np.moveaxis(mu, axis, 0)
        low, high = np.minimum(along[:-1], along[1:]), np.maximum(along[:-1], along[1:])
        faces += int(np.count_nonzero(low))
        jumps += int(np.count_nonzero((low > 0) & (high > 100.0 * low)))
    return jumps / max(faces, 1)


def _too_slow(history: list[float], tol: float) -> bool:
    """Whether the cheap method will not get to `tol` within its limit, at the present pace."""
    early, late = _PACE
    if len(history) != late + 1:
        return False
    pace = np.log(history[late] / history[early]) / (late - early)
    return bool(pace >= 0 or late + np.log(tol / history[late]) / pace > _CHEAP_LIMIT)


def first_method(lam: Double, mu: Double, spacing: Spacing, held: NDArray[np.bool_]) -> str:
    """The coarse method to begin with.

    ``gal4b`` where the cheap one is known to be slow: nu above .45, voxels that alternate in
    stiffness as in a dither (more than a tenth of the faces part moduli over 100 times apart),
    voxels flatter than 2, plates of fewer than 4 voxels, supports between coarse nodes.
    """
    rubbery = bool(np.any(lam > 9.0 * mu))  # lambda = 2 mu nu / (1 - 2 nu) = 9 mu at nu .45
    flat = max(spacing) > 2.0 * min(spacing) or min(lam.shape) < 4
    hard = rubbery or flat or _lost_supports(held) or _share_of_jumps(mu) > 0.1
    return "gal4b" if hard else "avg2"


class LinearSystem:
    """K u = f on a grid of voxels, with held unknowns and springs.

    Parameters
    ----------
    lam, mu : ndarray of float64, shape (nz, ny, nx)
        Lame constants of each voxel, MPa; both exactly 0 where the voxel is empty. Nodes that
        touch no material are no unknowns, and all work is done in the bounding box of the others.
    spacing : tuple of float
        Voxel edge along x, y, z, mm.
    fixed : ndarray of bool, shape (3, nz+1, ny+1, nx+1)
        Where the displacement along x, y, z is given (0 unless `solve` is told otherwise).
    springs : ndarray of float64, shape of `fixed`, optional
        Springs to ground, N/mm.
    beds : tuple of Bed
        Foundations whose diagonals are among the springs and whose couplings act beside them.
    plates : PlateSet, optional
        Nodes, none of them fixed, that move rigidly.
    element : str
        See `voxelmat.fea.element`.
    coarse : str
        ``"auto"``, or one of `voxelmat.fea.multigrid.METHODS`.
    monitor : Monitor

    Raises
    ------
    InputError
        Arrays of wrong shape, impossible moduli, negative springs, an unknown name.
    """

    def __init__(
        self,
        lam: Double,
        mu: Double,
        spacing: Spacing,
        fixed: NDArray[np.bool_],
        *,
        springs: Double | None = None,
        beds: tuple[Bed, ...] = (),
        plates: PlateSet | None = None,
        element: str = DEFAULT,
        coarse: str = "auto",
        monitor: Monitor = SILENT,
    ) -> None:
        lam = np.ascontiguousarray(lam, dtype=np.float64)
        mu = np.ascontiguousarray(mu, dtype=np.float64)
        check_moduli(lam, mu)
        shape = (3, *(n + 1 for n in lam.shape))
        if fixed.shape != shape or fixed.dtype != bool:
            raise InputError(f"fixed must be bool of shape {shape}; got {fixed.shape}.")
        if springs is not None and not (springs.shape == shape and np.all(springs >= 0)):
            raise InputError(f"springs must be >= 0 N/mm and of shape {shape}.")
        if not all(np.isfinite(h) and h > 0 for h in spacing):
            raise InputError(f"The spacing must be above 0 mm; got {spacing}.")
        if coarse not in ("auto", *METHODS):
            raise InputError(f"coarse is one of auto, {', '.join(METHODS)}; got {coarse!r}.")
        self.shape = shape
        self._monitor = monitor
        self._window = self._frame(mu, springs, whole=bool(beds) or plates is not None)
        lam, mu = self._window.voxels(lam), self._window.voxels(mu)
        springs = None if springs is None else self._window.nodes(springs)
        touched = touched_nodes(mu > 0)
        held = self._window.nodes(fixed) & touched
        self._free = (~held & touched).astype(np.uint8)
        if plates is not None:
            if np.any(held & plates.mask) or np.any(plates.mask & ~touched):
                raise InputError("A node of a plate is fixed too, or touches no material.")
            held = held | plates.mask  # the preconditioner sees plates as held
        self._plates = plates
        self._grid = Grid(lam, mu, spacing, element, held, touched, springs)
        stiffness = Stiffness(lam, mu, spacing, element, springs)
        leaning = tuple(bed for bed in beds if bed.leans)
        self.operator: Product = Coupled(stiffness, leaning) if leaning else stiffness
        self._automatic = coarse == "auto"
        self._method = first_method(lam, mu, spacing, held) if self._automatic else coarse
        self._preconditioner: Preconditioner | None = None

    @staticmethod
    def _frame(mu: Double, springs: Double | None, *, whole: bool) -> Window:
        """What the work is cut to; beds and plates count their nodes on the whole grid."""
        window = Window(mu > 0)
        if whole or (springs is not None and not window.holds(springs)):
            return Window(np.ones(mu.shape, dtype=bool))
        return window

    @property
    def free(self) -> NDArray[np.uint8]:
        """1 where an unknown exists, 0 elsewhere; shape (3, nz+1, ny+1, nx+1)."""
        return self._window.whole(self._free)

    @property
    def method(self) -> str:
        """The coarse method in use."""
        return self._method

    @property
    def nbytes(self) -> int:
        """Memory held between solves, bytes."""
        extra = 0 if self._preconditioner is None else self._preconditioner.nbytes
        return self.operator.nbytes + int(self._free.nbytes) + extra

    def apply(self, u: Double) -> Double:
        """K u (springs included), N, on all nodes, held ones too."""
        u = np.ascontiguousarray(u, dtype=np.float64)
        if u.shape != self.shape:
            raise InputError(f"u must have shape {self.shape}; got {u.shape}.")
        return self._window.whole(self._product(self._window.nodes(u)))

    def _product(self, u: Double) -> Double:
        """K u on the window."""
        out = np.empty_like(u)
        with computing(), crew(u[0].size):
            self.operator.apply(u, out)
        return out

    def _make(self, method: str) -> Preconditioner:
        return make_preconditioner(self._grid, method)

    def _ready(self) -> Preconditioner:
        if self._preconditioner is None or self._preconditioner.method != self._method:
            self._preconditioner = None  # let go of the old one before the new one is built
            self._monitor.report("preparing the solver", done=0, total=0, method=self._method)
            inner = self._make(self._method)
            self._preconditioner = inner
            if self._plates is not None:
                self._preconditioner = PlatePreconditioner(
                    inner, self.operator, self._plates, self._free, self._monitor
                )
        return self._preconditioner

    def _start(self, x0: Double | None, prescribed: Double | None) -> tuple[Double, Double]:
        """First guess and the given displacements, both on the window."""
        given = np.zeros(self._free.shape)
        if prescribed is not None:
            if prescribed.shape != self.shape:
                raise InputError(f"prescribed must have shape {self.shape}.")
            given[self._grid.held] = self._window.nodes(prescribed)[self._grid.held]
        x = given.copy()
        if x0 is not None:
            if x0.shape != self.shape:
                raise InputError(f"x0 must have shape {self.shape}; got {x0.shape}.")
            x += self._window.nodes(x0) * self._free
        if not (np.all(np.isfinite(x))):
            raise InputError("A first guess or a prescribed displacement is not finite.")
        return x, given

    def _size(self, force: Double) -> float:
        """Size of a force on free unknowns."""
        on = force * self._free
        return float(np.sqrt(dot(on, on)))

    def _from(
        self, b: Double, x: Double, given: Double, noise: float, tol: float, maxiter: int
    ) -> Iteration:
        """Iterate from x, which holds the given displacements; a load below `noise` is none."""
        norm = self._size(b - self._product(given) if given.any() else b)
        if norm <= noise:
            return Iteration(given, 0, 0.0, [0.0], "converged")
        return self._iterate(b, Iteration(x), norm, tol, maxiter)

    def solve(
        self,
        b: Double,
        *,
        x0: Double | None = None,
        prescribed: Double | None = None,
        tol: float = 1e-8,
        maxiter: int = 1000,
    ) -> Solution:
        """Solve for one load.

        Parameters
        ----------
        b : ndarray of float64, shape (3, nz+1, ny+1, nx+1)
            Nodal forces, N; what falls on held or untouched nodes has no effect.
        x0 : ndarray, optional
            First guess, mm.
        prescribed : ndarray, optional
            Displacement at held unknowns, mm; other entries are ignored.
        tol : float
            Relative residual to reach.
        maxiter : int
            Most iterations.

        Raises
        ------
        ConvergenceError
            With the residual history, when `tol` is out of reach.
        """
        if not (0 < tol < 1 and maxiter >= 1):
            raise InputError(f"tol must lie in 0 to 1 and maxiter be >= 1; got {tol}, {maxiter}.")
        if b.shape != self.shape or not np.all(np.isfinite(b)):
            raise InputError(f"The load must be finite and of shape {self.shape}; got {b.shape}.")
        b = self._window.nodes(np.asarray(b, dtype=np.float64))
        with computing(), crew(b[0].size):
            x, given = self._start(x0, prescribed)
            if self._plates is not None:
                return self._solve_with_plates(self._plates, b, x, given, tol, maxiter)
            if not given.any():
                return self._finished(self._from(b, x, given, 0.0, tol, maxiter), tol)
            # What is carried along rigidly is no part of the problem, nor of its residual.
            held = self._grid.held
            fixed = given[held]
            noise = _NOISE * self._size(self._product(given))
            lift = rigid_lift(given, held, self._grid.spacing) * self._grid.touched
            given -= lift * held
            x = x - lift if x0 is not None else given.copy()
            run = self._from(b - self._product(lift), x, given, noise, tol, maxiter)
            run.x += lift
            run.x[held] = fixed
        return self._finished(run, tol)

    def _finished(self, run: Iteration, tol: float) -> Solution:
        if run.state != "converged":
            raise ConvergenceError(self._complaint(run, tol), run.history)
        return Solution(
            u=self._window.whole(run.x),
            iterations=run.iterations,
            residual=run.residual,
            history=tuple(run.history),
        )

    def _solve_with_plates(
        self, plates: PlateSet, b: Double, x: Double, given: Double, tol: float, maxiter: int
    ) -> Solution:
        """Solve for what comes on top of the given motions, in the space that plates allow."""
        given = given + plates.given()
        force = (b - self._product(given)) * self._free
        plates.project(force)
        norm = float(np.sqrt(dot(force, force)))
        if norm == 0.0:
            return Solution(u=given, iterations=0, residual=0.0, history=(0.0,))
        start = (x - given) * self._free if np.any(x) else np.zeros(self.shape)
        plates.project(start)
        operator = PlateOperator(self.operator, plates)
        run = self._iterate(force, Iteration(start), norm, tol, maxiter, operator)
        run.x += given
        return self._finished(run, tol)

    def _next_method(self) -> str | None:
        """What the automatic choice goes over to when the present method is too slow."""
        if not self._automatic:
            return None
        small = int(self._free.sum()) <= _DIRECT_UNKNOWNS
        return {"avg2": "gal4b", "gal4b": "direct" if small else None}.get(self._method)

    def _iterate(
        self,
        force: Double,
        run: Iteration,
        norm: float,
        tol: float,
        maxiter: int,
        operator: Operator | None = None,
    ) -> Iteration:
        while True:
            following = self._next_method()
            cheap = following is not None and self._method == "avg2"
            patience = run.iterations + (_CHEAP_LIMIT if cheap else _DEAR_LIMIT)
            conjugate_gradients(
                self.operator if operator is None else operator,
                self._ready(),
                force,
                self._free,
                run,
                norm=norm,
                tol=tol,
                limit=maxiter if following is None else min(maxiter, patience),
                monitor=self._monitor,
                too_slow=(lambda history: _too_slow(history, tol)) if cheap else None,
            )
            if run.state == "converged" or following is None or run.iterations >= maxiter:
                return run
            self._method = following

    def _complaint(self, run: Iteration, tol: float) -> str:
        mu = self._grid.mu[self._grid.mu > 0]
        contrast = float(mu.max() / mu.min()) if mu.size else 1.0
        how = {"limit": "stopped", "stalled": "stalled", "broken": "broke down"}[run.state]
        return (
            f"The solver {how} after {run.iterations} iterations at residual {run.residual:.2g} "
            f"(asked for {tol:.2g}), with coarse method {self._method}. The stiffness contrast is "
            f"{contrast:.2g}. Check that every piece is held, raise maxiter, or ask for a larger "
            f"tolerance."
        )

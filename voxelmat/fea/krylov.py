"""Conjugate gradients in double precision, with a preconditioner in single precision."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from voxelmat.fea.multigrid import Preconditioner
from voxelmat.fea.operator import dot, planes
from voxelmat.kernels.vector import cg_advance, cg_direction
from voxelmat.monitor import Monitor

__all__ = ["Iteration", "Operator", "conjugate_gradients"]

Double = NDArray[np.float64]

# Iterations without progress, and what counts as progress in that time, before we call it a
# stall. At high contrast the residual may rise for long while the error falls.
_PATIENCE, _PROGRESS = 400, 0.7
# Times that the recursive residual may be replaced by the true one before we call it a stall.
_RESTARTS = 4


class Operator(Protocol):
    """What conjugate gradients multiply by."""

    def apply(self, u: Double, y: Double) -> None:
        """Write K u to y."""


@dataclass
class Iteration:
    """Where a run of conjugate gradients got to.

    Attributes
    ----------
    x : ndarray of float64, shape (3, nz+1, ny+1, nx+1)
        The solution so far; changed in place.
    iterations : int
    residual : float
        Relative to the right-hand side.
    history : list of float
        One relative residual an iteration, the start first.
    state : str
        ``"converged"``, ``"limit"`` (too many iterations), ``"stalled"`` or ``"broken"``.
    """

    x: Double
    iterations: int = 0
    residual: float = np.inf
    history: list[float] = field(default_factory=list)
    state: str = "limit"


def _true_residual(K: Operator, b: Double, x: Double, free: NDArray[np.uint8], r: Double) -> float:
    """Write b - K x on free unknowns to r; return its norm."""
    K.apply(x, r)
    np.subtract(b, r, out=r)
    r *= free
    return float(np.sqrt(dot(r, r)))


def conjugate_gradients(
    K: Operator,
    M: Preconditioner,
    b: Double,
    free: NDArray[np.uint8],
    run: Iteration,
    *,
    norm: float,
    tol: float,
    limit: int,
    monitor: Monitor,
    too_slow: Callable[[list[float]], bool] | None = None,
) -> Iteration:
    """Solve K x = b on free unknowns, starting from and updating ``run``.

    Parameters
    ----------
    K, M : Operator, Preconditioner
    b : ndarray of float64
        Right-hand side.
    free : ndarray of uint8
        1 where an unknown exists; x and b count only there.
    run : Iteration
        Start and, afterwards, the end.
    norm : float
        What residuals are relative to.
    tol : float
        Relative residual to reach; checked on the true residual.
    limit : int
        Most iterations in all, those already in `run` included.
    monitor : Monitor
        Told each iteration.
    too_slow : callable, optional
        Looks at the history and says whether to stop, as at the limit.
    """
    x = run.x
    r = np.empty_like(x)
    p, q = np.zeros_like(x), np.empty_like(x)
    sums = np.empty(x.shape[0] * x.shape[1])
    size = _true_residual(K, b, x, free, r)
    run.residual = size / norm
    run.history.append(run.residual)
    start, rz, alpha, restarts = True, 0.0, 0.0, 0
    best: list[float] = [run.residual]
    # Without coarse levels the residual rises for a long time before it falls.
    patience = limit if M.method == "jacobi" else _PATIENCE
    while True:
        if run.residual <= tol:
            size = _true_residual(K, b, x, free, r)
            run.residual = size / norm
            if run.residual <= tol:
                run.state = "converged"
                return run
            # Rounding has driven the recursive residual away from the true one: start again.
            start, restarts = True, restarts + 1
        best.append(min(best[-1], run.residual))
        stuck = len(best) > patience and best[-1] > _PROGRESS * best[-1 - patience]
        if stuck or restarts > _RESTARTS:
            run.state = "stalled"
            return run
        if run.iterations >= limit or (too_slow is not None and too_slow(run.history)):
            run.state = "limit"
            return run
        z = M.apply(r, 1.0 / size)
        # The preconditioner is rounded and so not quite symmetric: the flexible form of beta
        # (r_new - r_old = -alpha q) keeps the directions conjugate all the same.
        beta = 0.0 if start else -alpha * dot(q, z) * size / rz
        rz = dot(r, z) * size
        cg_direction(planes(p), planes(z), planes(free), size, 0.0 if start else beta)
        K.apply(p, q)
        curvature = dot(p, q)
        if not (np.isfinite(curvature) and curvature > 0 and rz > 0):
            run.state = "broken"
            return run
        alpha = rz / curvature
        args = (planes(v) for v in (x, r, p, q, free))
        cg_advance(*args, alpha, sums)
        size = float(np.sqrt(sums.sum()))
        start = False
        run.iterations += 1
        run.residual = size / norm
        run.history.append(run.residual)
        monitor.report(
            "solving", done=run.iterations, total=0, residual=run.residual, method=M.method
        )

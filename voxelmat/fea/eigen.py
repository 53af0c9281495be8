"""A few extreme eigenpairs of A x = t B x from products alone, by SciPy's LOBPCG in short runs.

A. V. Knyazev, SIAM J. Sci. Comput. 23 (2001) 517 (from memory). Short runs, because only the
wanted pairs have to converge and not the guard vectors that speed them up, and because each pair
is judged by its own relative residual.
"""

from __future__ import annotations

import warnings
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import scipy.linalg
from numpy.typing import NDArray
from scipy.sparse.linalg import lobpcg

from voxelmat.errors import ConvergenceError
from voxelmat.monitor import Monitor

__all__ = ["Eigenpairs", "Problem", "extreme_pairs"]

Double = NDArray[np.float64]
Block = Callable[[Double], Double]

# Problems up to this many unknowns are solved as dense matrices.
_DENSE = 700
# Iterations a run, and runs without any progress before giving up.
_RUN, _PATIENCE = 8, 4
# What SciPy is asked for: never reached, the decision is made here.
_NEVER = 1e-250


@dataclass(frozen=True, slots=True, kw_only=True)
class Problem:
    """A x = t B x on blocks (n, m).

    Attributes
    ----------
    A, B : callable
        Symmetric; B positive definite on the complement of `fixed`.
    precondition : callable
        Nearly the inverse of the stiffness: of A where small t are wanted, of B for large ones.
    size : int
        n.
    largest : bool
        Which end of the spectrum.
    fixed : ndarray or None, shape (n, r)
        B-orthonormal eigenvectors that are known and left out.
    """

    A: Block
    B: Block
    precondition: Block
    size: int
    largest: bool
    fixed: Double | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Eigenpairs:
    """What was found, the wanted ones first.

    Attributes
    ----------
    values : ndarray, shape (m,)
        In order from the wanted end.
    vectors : ndarray, shape (n, m)
        B-orthonormal.
    residuals : ndarray, shape (m,)
        Size of the residual relative to the stiffness term, in the norm of the inverse
        stiffness; the relative error of a value is about its square over its relative distance
        to the next.
    iterations : int
    history : tuple of float
        Largest residual of the wanted pairs after each run.
    """

    values: Double
    vectors: Double
    residuals: Double
    iterations: int
    history: tuple[float, ...]


def _dense(problem: Problem, count: int) -> tuple[Double, Double]:
    """All matrices built; the fixed vectors are projected out exactly."""
    unit = np.eye(problem.size)
    A, B = problem.A(unit), problem.B(unit)
    A, B = (A + A.T) / 2, (B + B.T) / 2
    if problem.fixed is not None and problem.fixed.shape[1]:
        basis = scipy.linalg.null_space(problem.B(problem.fixed).T)
    else:
        basis = unit
    A, B = basis.T @ A @ basis, basis.T @ B @ basis
    n = len(A)
    ends = (max(n - count, 0), n - 1) if problem.largest else (0, min(count, n) - 1)
    values, vectors = scipy.linalg.eigh(A, B, subset_by_index=ends)
    if problem.largest:
        values, vectors = values[::-1], vectors[:, ::-1]
    return values, basis @ vectors


def _residuals(problem: Problem, values: Double, X: Double) -> Double:
    """See `Eigenpairs.residuals`; inf where the stiffness term vanishes."""
    AX, BX = problem.A(X), problem.B(X)
    R = AX - BX * values
    stiffness = BX * values**2 if problem.largest else AX
    energy = np.einsum("nm,nm->m", X, stiffness)
    error = np.abs(np.einsum("nm,nm->m", R, problem.precondition(R)))
    out = np.full(len(values), np.inf)
    sound = energy > 0
    out[sound] = np.sqrt(error[sound] / energy[sound])
    return out


def _run(problem: Problem, X: Double) -> tuple[Double, Double]:
    """One run of SciPy's LOBPCG; its warnings are about a tolerance that we judge ourselves."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        values, vectors = lobpcg(
            problem.A,
            X,
            B=problem.B,
            M=problem.precondition,
            Y=problem.fixed,
            tol=_NEVER,
            maxiter=_RUN,
            largest=problem.largest,
        )
    return np.asarray(values), np.asarray(vectors)


def _start(problem: Problem, block: int) -> Double:
    """Random vectors, smoothed by the preconditioner."""
    rng = np.random.default_rng(0)
    return np.asarray(problem.precondition(rng.standard_normal((problem.size, block))))


def extreme_pairs(
    problem: Problem,
    count: int,
    *,
    guard: int,
    tol: float,
    maxiter: int,
    monitor: Monitor,
    stage: str,
) -> Eigenpairs:
    """Find `count` pairs at one end of the spectrum, with `guard` vectors more to speed them up.

    Parameters
    ----------
    problem : Problem
    count, guard : int
    tol : float
        Residual to reach, see `Eigenpairs`. Where it is out of reach the best pairs come back all
        the same, and their residuals tell.
    maxiter : int
        Most iterations.
    monitor : Monitor
    stage : str
        What the monitor is told.

    Raises
    ------
    ConvergenceError
        Where the iteration breaks down altogether.
    """
    known = 0 if problem.fixed is None else problem.fixed.shape[1]
    block = min(count + guard, problem.size - known)
    if problem.size <= max(_DENSE, 6 * block + known):
        values, X = _dense(problem, block)
        residuals = _residuals(problem, values, X)
        return Eigenpairs(values=values, vectors=X, residuals=residuals, iterations=0, history=())
    X = _start(problem, block)
    history: list[float] = []
    done = 0
    best: tuple[float, Double, Double, Double] | None = None
    while done < maxiter and _improving(history):
        try:
            values, X = _run(problem, np.array(X))
        except (ValueError, np.linalg.LinAlgError) as error:
            raise ConvergenceError(
                f"The eigenvalue iteration broke down ({error}). Check that the part hangs "
                f"together and that no voxel is far softer than the rest, or ask for fewer modes.",
                history,
            ) from error
        done += _RUN
        residuals = _residuals(problem, values, X)
        worst = float(residuals[:count].max())
        history.append(worst)
        monitor.report(stage, done=done, total=0, residual=worst)
        if best is None or worst < best[0]:
            best = worst, values, X, residuals
        if worst <= tol:
            break
    if best is None or not np.all(np.isfinite(best[1])):
        raise ConvergenceError("The eigenvalue iteration found nothing finite.", history)
    _, values, X, residuals = best
    return Eigenpairs(
        values=values, vectors=X, residuals=residuals, iterations=done, history=tuple(history)
    )


def _improving(history: list[float]) -> bool:
    """Whether some recent run brought the residual down by a tenth at least."""
    if len(history) <= _PATIENCE:
        return True
    return min(history[-_PATIENCE:]) < 0.9 * min(history[:-_PATIENCE])

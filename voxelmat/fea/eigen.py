"""A few extreme eigenpairs of A x = t B x from products alone, by LOBPCG.

A. V. Knyazev, SIAM J. Sci. Comput. 23 (2001) 517 (from memory). SciPy's own keeps the iterate of
the smallest Euclidean residual, which says little where moduli lie orders apart: it then throws
good iterates away and stands still. Here each pair is judged in the norm of energy, only the
wanted pairs have to converge, and directions that have become dependent are dropped.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from voxelmat.errors import ConvergenceError
from voxelmat.monitor import Monitor

__all__ = ["Eigenpairs", "Problem", "extreme_pairs"]

Double = NDArray[np.float64]
Block = Callable[[Double], Double]

# Problems up to this many unknowns are solved as dense matrices.
_DENSE = 700
# Iterations without progress, and what counts as progress, before giving up.
_PATIENCE, _PROGRESS = 40, 0.7
# Iterations after which the largest value tells whether it will pass the floor.
_LOOK = 20
# Pairs this far below the tolerance are not worked on.
_SETTLED = 0.1
# Directions of the search space below this share of the largest count as dependent.
_DEPENDENT = 1e-10
# Products are updated, not made anew, so often; rounding adds up.
_REFRESH = 25


@dataclass(frozen=True, slots=True, kw_only=True)
class Problem:
    """A x = t B x on blocks (m, n), a vector in each row.

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
    fixed : ndarray or None, shape (r, n)
        B-orthonormal eigenvectors that are known and left out.
    project : callable or None
        Onto the space that A and B act in, where it is not all of it.
    floor : float
        Where `largest`: stop early when no value seems to get above this.
    """

    A: Block
    B: Block
    precondition: Block
    size: int
    largest: bool
    fixed: Double | None = None
    project: Block | None = None
    floor: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Eigenpairs:
    """What was found, the wanted ones first.

    Attributes
    ----------
    values : ndarray, shape (m,)
        In order from the wanted end.
    vectors : ndarray, shape (m, n)
        B-orthonormal.
    residuals : ndarray, shape (m,)
        Size of the residual relative to the stiffness term, in the norm of the inverse
        stiffness; the relative error of a value is about its square over its relative distance
        to the next.
    iterations : int
    history : tuple of float
        Largest residual of the wanted pairs, one an iteration.
    """

    values: Double
    vectors: Double
    residuals: Double
    iterations: int
    history: tuple[float, ...]


def _dense(problem: Problem, count: int) -> tuple[Double, Double]:
    """All matrices built; the fixed vectors are projected out exactly."""
    basis = np.eye(problem.size)
    A, B = problem.A(basis), problem.B(basis)
    A, B = (A + A.T) / 2, (B + B.T) / 2
    if problem.project is not None:
        basis = scipy.linalg.orth(problem.project(basis), rcond=0.5)
        A, B = basis.T @ A @ basis, basis.T @ B @ basis
    if problem.fixed is not None and len(problem.fixed):
        basis = scipy.linalg.null_space(problem.B(problem.fixed))
        A, B = basis.T @ A @ basis, basis.T @ B @ basis
    n = len(A)
    ends = (max(n - count, 0), n - 1) if problem.largest else (0, min(count, n) - 1)
    values, vectors = scipy.linalg.eigh(A, B, subset_by_index=ends)
    if problem.largest:
        values, vectors = values[::-1], vectors[:, ::-1]
    return values, np.ascontiguousarray((basis @ vectors).T)


class _Search:
    """The block of approximations X, the directions P that led to it, and their products."""

    def __init__(self, problem: Problem, X: Double) -> None:
        self._problem = problem
        self._fixed = problem.fixed
        self._B_fixed = None if self._fixed is None else problem.B(self._fixed)
        self.X = self._deflated(X)
        self.P = self.AP = self.BP = np.zeros((0, problem.size))
        self.AX, self.BX = problem.A(self.X), problem.B(self.X)
        self.values = np.zeros(len(X))
        self.advance(self.P, np.zeros(0, dtype=bool))

    def _deflated(self, W: Double) -> Double:
        """Without the known eigenvectors; twice, for the last digits."""
        if self._fixed is None or self._B_fixed is None:
            return W
        for _ in range(2):
            W = W - (W @ self._B_fixed.T) @ self._fixed
        return W

    def refresh(self) -> None:
        """Make the products of X anew."""
        self.X = self._deflated(self.X)
        self.AX, self.BX = self._problem.A(self.X), self._problem.B(self.X)

    def residuals(self) -> tuple[Double, Double]:
        """Preconditioned residuals (m, n) and their sizes, see `Eigenpairs.residuals`."""
        R = self.AX - self.BX * self.values[:, None]
        W = self._problem.precondition(R)
        energy = self.values**2 if self._problem.largest else self.values
        error = np.abs(np.einsum("mn,mn->m", R, W))
        sound = energy > 0
        size = np.sqrt(error / np.where(sound, energy, 1.0))
        return W, np.where(sound, size, np.inf)

    def advance(self, W: Double, active: NDArray[np.bool_]) -> None:
        """Rayleigh-Ritz on X, the new directions W and those P that belong to active pairs."""
        m = len(self.X)
        W = self._deflated(W)
        W = W - (W @ self.BX.T) @ self.X
        keep = active if len(self.P) else slice(0)
        S = np.concatenate([self.X, W, self.P[keep]])
        AS = np.concatenate([self.AX, self._products(self._problem.A, W), self.AP[keep]])
        BS = np.concatenate([self.BX, self._products(self._problem.B, W), self.BP[keep]])
        C, self.values = _ritz(S, AS, BS, m, self._problem.largest)
        X, D = C[:, :m], C[:, m:]
        self.P, self.AP, self.BP = D @ S[m:], D @ AS[m:], D @ BS[m:]
        self.X, self.AX, self.BX = (X @ S[:m] + self.P, X @ AS[:m] + self.AP, X @ BS[:m] + self.BP)

    def _products(self, product: Block, W: Double) -> Double:
        return product(W) if len(W) else W


def _ritz(S: Double, AS: Double, BS: Double, m: int, largest: bool) -> tuple[Double, Double]:
    """Coefficients (m, s) over the rows of S of the best B-orthonormal pairs, and values."""
    G, H = S @ BS.T, S @ AS.T
    G, H = (G + G.T) / 2, (H + H.T) / 2
    size = np.sqrt(np.maximum(np.diag(G), 0.0))
    scale = np.where(size > 0, 1.0 / np.where(size > 0, size, 1.0), 0.0)
    d, V = np.linalg.eigh(scale[:, None] * G * scale)
    keep = d > _DEPENDENT * d[-1]
    T = scale[:, None] * V[:, keep] / np.sqrt(d[keep])
    values, c = np.linalg.eigh(T.T @ H @ T)
    if largest:
        values, c = values[::-1], c[:, ::-1]
    if len(values) < m:
        raise np.linalg.LinAlgError(f"only {len(values)} of {m} directions are independent")
    return np.ascontiguousarray((T @ c[:, :m]).T), np.asarray(values[:m])


def _direct(problem: Problem, block: int) -> Eigenpairs:
    values, X = _dense(problem, block)
    R = problem.A(X) - problem.B(X) * values[:, None]
    energy = values**2 if problem.largest else np.abs(values)
    error = np.abs(np.einsum("mn,mn->m", R, problem.precondition(R)))
    residuals = np.sqrt(error / np.maximum(energy, 1e-300))
    return Eigenpairs(values=values, vectors=X, residuals=residuals, iterations=0, history=())


def extreme_pairs(
    problem: Problem,
    count: int,
    *,
    guard: int,
    tol: float,
    maxiter: int,
    monitor: Monitor,
    stage: str,
    start: Double | None = None,
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
    start : ndarray, shape (m, n), optional
        Vectors of a similar problem to begin with; random ones fill up the block.

    Raises
    ------
    ConvergenceError
        Where the iteration breaks down altogether.
    """
    known = 0 if problem.fixed is None else len(problem.fixed)
    block = min(count + guard, problem.size - known)
    if problem.size <= max(_DENSE, 6 * block + known):
        return _direct(problem, block)
    history: list[float] = []
    try:
        first = _first(problem, block, start)
        return _iterate(problem, count, first, tol, maxiter, history, monitor, stage)
    except np.linalg.LinAlgError as error:
        raise ConvergenceError(
            f"The eigenvalue iteration broke down ({error}). Check that the part hangs together "
            f"and that no voxel is far softer than the rest, or ask for fewer modes.",
            history,
        ) from error


def _first(problem: Problem, block: int, start: Double | None) -> Double:
    """Given vectors, and random ones smoothed by the preconditioner."""
    rng = np.random.default_rng(0)
    given = np.zeros((0, problem.size)) if start is None else start[:block]
    rest = rng.standard_normal((block - len(given), problem.size))
    return np.concatenate([given, problem.precondition(rest)]) if len(rest) else given


def _iterate(
    problem: Problem,
    count: int,
    first: Double,
    tol: float,
    maxiter: int,
    history: list[float],
    monitor: Monitor,
    stage: str,
) -> Eigenpairs:
    search = _Search(problem, first)
    best: Eigenpairs | None = None
    while True:
        W, residuals = search.residuals()
        worst = float(residuals[:count].max())
        history.append(worst)
        monitor.report(stage, done=len(history) - 1, total=0, residual=worst)
        if best is None or worst < min(history[:-1]):
            best = Eigenpairs(
                values=search.values,
                vectors=search.X,
                residuals=residuals,
                iterations=len(history) - 1,
                history=(),
            )
        done = len(history) > maxiter or _stuck(history) or _hopeless(problem, search, history)
        if worst <= tol or done:
            return replace(best, iterations=len(history) - 1, history=tuple(history))
        active = residuals > _SETTLED * tol
        search.advance(W[active], active)
        if len(history) % _REFRESH == 0:
            search.refresh()


def _hopeless(problem: Problem, search: _Search, history: list[float]) -> bool:
    """Whether all values stay below the floor; Ritz values only rise towards the largest one."""
    return problem.largest and len(history) > _LOOK and search.values[0] < problem.floor


def _stuck(history: list[float]) -> bool:
    if len(history) <= _PATIENCE:
        return False
    return min(history[-_PATIENCE:]) > _PROGRESS * min(history[:-_PATIENCE])

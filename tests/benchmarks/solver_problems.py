"""Problems and rivals of the solver's benchmark: invented cubes, SciPy's CSR, pyamg, a triad."""

from __future__ import annotations

import statistics
import time
from collections.abc import Callable
from typing import Any

import numpy as np
import scipy.sparse
import scipy.sparse.linalg
from numba import njit, prange

from voxelmat.fea.element import basis_matrices, coefficients

SPACING = (1.0, 1.0, 1.0)


def lame(E: Any, nu: Any) -> tuple[Any, Any]:
    """Lame constants."""
    return E * nu / ((1 + nu) * (1 - 2 * nu)), E / (2 * (1 + nu))


def problem(name: str, n: int) -> tuple[np.ndarray, np.ndarray]:
    """Lame constants of a cube of n^3 voxels, invented."""
    rng = np.random.default_rng(0)
    one = np.ones((n, n, n))
    z, y, x = (np.indices(one.shape) + 0.5) / n
    if name == "homogeneous":
        return lame(one, 0.3)
    if name == "SIMP":  # a connected network of about 30 % in void of 1e-9
        wave = sum(np.cos(4 * np.pi * c) for c in (x, y, z))
        density = np.clip(4 * (wave - 0.3) + 0.5, 0, 1)
        density[:, :, -max(2, n // 16) :] = 1
        return lame(1e-9 + (1 - 1e-9) * density**3, 0.3)
    if name == "random":
        stiff = rng.random(one.shape) < 0.5
        return lame(np.where(stiff, 1.0, 1e-3), np.where(stiff, 0.35, 0.45))
    if name == "dither":  # graded along x from soft to rigid
        stiff = rng.random(one.shape) < x
        return lame(np.where(stiff, 1.0, 4e-4), np.where(stiff, 0.35, 0.49))
    return lame(one, float(name.removeprefix("nu ")))


def cantilever(shape: tuple[int, ...]) -> tuple[np.ndarray, np.ndarray]:
    """Clamped at x = 0, a downward force spread over the nodes at the other end."""
    fixed = np.zeros((3, *(n + 1 for n in shape)), dtype=bool)
    fixed[..., 0] = True
    b = np.zeros(fixed.shape)
    b[2, ..., -1] = -1.0 / b[2, ..., -1].size
    return fixed, b


def by_node(a: np.ndarray) -> np.ndarray:
    """Node field [3, k, j, i] as a vector with the three components of a node side by side."""
    return np.ascontiguousarray(a.transpose(1, 2, 3, 0)).ravel()


def assembled(lam: np.ndarray, mu: np.ndarray) -> scipy.sparse.csr_matrix:
    """K of the default element as a CSR matrix, unknowns ordered as by `by_node`."""
    shape = tuple(n + 1 for n in lam.shape)
    nodes = np.arange(np.prod(shape), dtype=np.int32).reshape(shape)
    low, high = slice(0, -1), slice(1, None)
    ends = [
        (high if a >> 2 else low, high if a & 2 else low, high if a & 1 else low) for a in range(8)
    ]
    corner = np.stack([nodes[e].ravel() for e in ends], axis=1)
    number = (3 * corner[:, :, None] + np.arange(3, dtype=np.int32)).reshape(-1, 24)
    values = np.stack([c.ravel() for c in coefficients(lam, mu)], axis=1)
    E = np.einsum("nq,qab->nab", values, basis_matrices(SPACING))
    rows, cols = np.repeat(number, 24, axis=1), np.tile(number, (1, 24))
    size = 3 * nodes.size
    return scipy.sparse.csr_matrix((E.ravel(), (rows.ravel(), cols.ravel())), shape=(size, size))


def rigid_modes(shape: tuple[int, ...]) -> np.ndarray:
    """The six rigid motions of a grid's nodes, (unknowns, 6)."""
    z, y, x = (c.ravel() for c in np.indices(tuple(n + 1 for n in shape), dtype=float))
    out = np.zeros((x.size, 3, 6))
    out[:, [0, 1, 2], [0, 1, 2]] = 1.0
    out[:, 1, 3], out[:, 2, 3] = -z, y
    out[:, 0, 4], out[:, 2, 4] = z, -x
    out[:, 0, 5], out[:, 1, 5] = -y, x
    return out.reshape(-1, 6)


def amg_solve(
    A: scipy.sparse.spmatrix, b: np.ndarray, modes: np.ndarray
) -> tuple[np.ndarray, int, float]:
    """pyamg's smoothed aggregation with rigid modes under CG to 1e-8: x, iterations, seconds.

    Raises ImportError where pyamg is not installed.
    """
    import pyamg

    start = time.perf_counter()
    hierarchy = pyamg.smoothed_aggregation_solver(
        A.tobsr(blocksize=(3, 3)), B=modes, max_coarse=500
    )
    residuals: list[float] = []
    x = hierarchy.solve(b, tol=1e-8, accel="cg", residuals=residuals, maxiter=200)
    return x, len(residuals) - 1, time.perf_counter() - start


@njit(parallel=True)
def triad(a, b, c, s):
    """STREAM's triad: a <- b + s c."""
    for i in prange(a.size):
        a[i] = b[i] + s * c[i]


def seconds(work: Callable[[], Any]) -> float:
    """Wall time of one call."""
    start = time.perf_counter()
    work()
    return time.perf_counter() - start


def compare(*works: Callable[[], Any], repeats: int) -> list[float]:
    """Median seconds of each, taken in turns so that a busy machine hits all alike."""
    taken = [[seconds(w) for w in works] for _ in range(repeats)]
    return [statistics.median(column) for column in zip(*taken, strict=True)]

"""The solver against SciPy on the same problems in one run; prints JSON.

Run as ``python tests/benchmarks/bench_solver.py [voxels along an edge]``. Every time is a median
over alternating repeats; the ratios are the figures that can be compared between machines.
"""

from __future__ import annotations

import json
import statistics
import sys
import time
from collections.abc import Callable
from typing import Any

import numpy as np
import scipy.sparse
import scipy.sparse.linalg

from voxelmat.fea.element import basis_matrices, coefficients
from voxelmat.fea.operator import Stiffness
from voxelmat.fea.system import LinearSystem
from voxelmat.kernels.threads import crew, threads

REPEATS = 5
MOST = 800  # iterations that SciPy gets
SPACING = (1.0, 1.0, 1.0)


def lame(E: Any, nu: Any) -> tuple[Any, Any]:
    return E * nu / ((1 + nu) * (1 - 2 * nu)), E / (2 * (1 + nu))


def problems(n: int) -> dict[str, tuple[np.ndarray, np.ndarray]]:
    """Lame constants of cubes of n^3 voxels, invented."""
    one = np.ones((n, n, n))
    z, y, x = (np.indices(one.shape) + 0.5) / n
    wave = np.cos(4 * np.pi * x) + np.cos(4 * np.pi * y) + np.cos(4 * np.pi * z)
    density = np.clip(4 * (wave - 0.3) + 0.5, 0, 1)
    density[:, :, -max(2, n // 16) :] = 1
    checker = np.indices(one.shape).sum(axis=0) % 2
    pad = z > 0.4
    return {
        "homogeneous": lame(one, 0.3),
        "density field with 1e-9 void": lame(1e-9 + density**3, 0.3),
        "soft pad on a rigid base": lame(np.where(pad, 1.0, 2000.0), np.where(pad, 0.49, 0.35)),
        "checkerboard 2500:1": lame(np.where(checker, 1.0, 2500.0), np.where(checker, 0.49, 0.35)),
        "nearly incompressible, nu .4995": lame(one, 0.4995),
    }


def assembled(lam: np.ndarray, mu: np.ndarray) -> scipy.sparse.csr_matrix:
    """K as a CSR matrix of the default element."""
    n = lam.shape[0] + 1
    nodes = np.arange(n**3, dtype=np.int32).reshape(n, n, n)
    low, high = slice(0, n - 1), slice(1, n)
    ends = [
        (high if a >> 2 else low, high if a & 2 else low, high if a & 1 else low) for a in range(8)
    ]
    corner = np.stack([nodes[e].ravel() for e in ends], axis=1)
    number = (3 * corner[:, :, None] + np.arange(3, dtype=np.int32)).reshape(-1, 24)
    values = np.stack([c.ravel() for c in coefficients(lam, mu)], axis=1)
    E = np.einsum("nq,qab->nab", values, basis_matrices(SPACING))
    rows, cols = np.repeat(number, 24, axis=1), np.tile(number, (1, 24))
    return scipy.sparse.csr_matrix((E.ravel(), (rows.ravel(), cols.ravel())), shape=(3 * n**3,) * 2)


def seconds(work: Callable[[], Any]) -> float:
    start = time.perf_counter()
    work()
    return time.perf_counter() - start


def compare(*works: Callable[[], Any], repeats: int = REPEATS) -> list[float]:
    """Median seconds of each, taken in turns so that a busy machine hits all alike."""
    taken = [[seconds(w) for w in works] for _ in range(repeats)]
    return [statistics.median(column) for column in zip(*taken, strict=True)]


def products(n: int) -> dict[str, float]:
    """One K u: ours in double and single precision, SciPy CSR."""
    lam, mu = problems(n)["homogeneous"]
    K = assembled(lam, mu)
    rng = np.random.default_rng(0)
    u = rng.standard_normal((3, n + 1, n + 1, n + 1))
    flat = np.ascontiguousarray(u.transpose(1, 2, 3, 0)).ravel()
    double = Stiffness(lam, mu, SPACING)
    single = Stiffness(lam.astype(np.float32), mu.astype(np.float32), SPACING)
    y, u32 = np.empty_like(u), u.astype(np.float32)
    y32 = np.empty_like(u32)
    double.apply(u, y)
    single.apply(u32, y32)
    miss = np.abs(y.transpose(1, 2, 3, 0).ravel() - K @ flat).max() / np.abs(y).max()
    with crew((n + 1) ** 3):
        d, s, c = compare(
            lambda: double.apply(u, y), lambda: single.apply(u32, y32), lambda: K @ flat, repeats=9
        )
    return {
        "ours_double_ns_a_voxel": 1e9 * d / n**3,
        "ours_single_ns_a_voxel": 1e9 * s / n**3,
        "scipy_csr_ns_a_voxel": 1e9 * c / n**3,
        "ratio_double": c / d,
        "ratio_single": c / s,
        "difference": float(miss),
        "csr_product_s": c,
    }


def jacobi_cg(
    K: scipy.sparse.csr_matrix, free: np.ndarray, b: np.ndarray
) -> tuple[np.ndarray, int]:
    """SciPy's conjugate gradients with the inverse diagonal, relative residual 1e-8."""
    A = K[free][:, free]
    M = scipy.sparse.diags(1.0 / A.diagonal())
    count = [0]

    def step(_: np.ndarray) -> None:
        count[0] += 1

    x, _ = scipy.sparse.linalg.cg(A, b[free], rtol=1e-8, maxiter=MOST, M=M, callback=step)
    out = np.zeros(len(b))
    out[free] = x
    return out, count[0]


def solves(n: int, product_s: float, repeats: int = 1) -> dict[str, dict[str, Any]]:
    """Set-up and solve of each problem: ours, and assembled SciPy CG on the same arrays."""
    fixed = np.zeros((3, n + 1, n + 1, n + 1), dtype=bool)
    fixed[..., 0] = True
    b = np.zeros(fixed.shape)
    b[2, ..., -1] = -1.0 / (n + 1) ** 2
    free = ~fixed.transpose(1, 2, 3, 0).ravel()
    flat = b.transpose(1, 2, 3, 0).ravel()
    out: dict[str, dict[str, Any]] = {}
    for name, (lam, mu) in problems(n).items():
        kept: dict[str, Any] = {}

        def ours(lam: np.ndarray = lam, mu: np.ndarray = mu, kept: dict = kept) -> None:
            kept["system"] = LinearSystem(lam, mu, SPACING, fixed)
            kept["ours"] = kept["system"].solve(b)

        def theirs(lam: np.ndarray = lam, mu: np.ndarray = mu, kept: dict = kept) -> None:
            kept["scipy"] = jacobi_cg(assembled(lam, mu), free, flat)

        ours()  # compiles
        mine, scipys = compare(ours, theirs, repeats=repeats)
        x, count = kept["scipy"]
        u = kept["ours"].u.transpose(1, 2, 3, 0).ravel()
        vectors = 5 * 8 * b.size
        out[name] = {
            "ours_s": mine,
            "scipy_jacobi_cg_s": scipys,
            "ratio": scipys / mine,
            "ours_in_csr_products": mine / product_s,
            "iterations": kept["ours"].iterations,
            "scipy_iterations": count,
            "scipy_reached_tolerance": count < MOST,
            "coarse_method": kept["system"].method,
            "difference": float(np.abs(u - x).max() / np.abs(u).max()),
            "bytes_a_voxel": (kept["system"].nbytes + vectors) / lam.size,
        }
    return out


def main() -> None:
    """Print one JSON object."""
    n = int(sys.argv[1]) if len(sys.argv) > 1 else 24
    product = products(n)
    report = {
        "voxels": n**3,
        "threads": threads(),
        "product": product,
        "solve": solves(n, product["csr_product_s"]),
    }
    print(json.dumps(report, indent=2))


if __name__ == "__main__":
    main()

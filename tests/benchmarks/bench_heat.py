"""Heat conduction: iterations against size, and times as multiples of SciPy's sparse product.

Run as ``python tests/benchmarks/bench_heat.py [sizes ...]``; prints JSON. All parts are invented.
"""

from __future__ import annotations

import json
import statistics
import sys
import time

import numpy as np
import scipy.sparse

from voxelmat.fea.heat_system import HeatSystem
from voxelmat.fea.scalar_element import element_matrices
from voxelmat.kernels.threads import threads

REPEATS = 5
SPACING = (1.0, 1.0, 1.0)


def parts(n: int) -> dict[str, tuple[np.ndarray, tuple[float, float, float]]]:
    """Conductivity of cubes of n^3 voxels, and the spacing."""
    rng = np.random.default_rng(0)
    one = np.ones((n, n, n))
    k, j, i = np.indices(one.shape)
    radius = np.sqrt((k + 0.5 - n / 2) ** 2 + (j + 0.5 - n / 2) ** 2)
    wave = sum(np.cos(4 * np.pi * (c + 0.5) / n) for c in (i, j, k))
    slits = np.where((k % 4 == 1) & (j > 1), 0.0, 1.0)
    return {
        "homogeneous": (one, SPACING),
        "voxels 1 x 1 x 0.3": (one, (1.0, 1.0, 0.3)),
        "metal shaft 250:1": (np.where(radius < n / 6, 250.0, 1.0), SPACING),
        "half metal at random 1000:1": (np.where(rng.random(one.shape) < 0.5, 1e3, 1.0), SPACING),
        "tenth metal at random 1000:1": (np.where(rng.random(one.shape) < 0.1, 1e3, 1.0), SPACING),
        "checkerboard 1000:1": (np.where((i + j + k) % 2, 1e3, 1.0), SPACING),
        "layers of two voxels 1000:1": (np.where(k // 2 % 2, 1e3, 1.0), SPACING),
        "four in ten voxels empty": (np.where(rng.random(one.shape) < 0.6, 1.0, 0.0), SPACING),
        "slits of one voxel": (slits, SPACING),
        "density field with 1e-9 void": (1e-9 + np.clip(4 * wave + 0.5, 0, 1) ** 3, SPACING),
    }


def matrix(k: np.ndarray) -> scipy.sparse.csr_matrix:
    """The assembled matrix, for the time of its product."""
    nodes = np.arange(np.prod([n + 1 for n in k.shape]), dtype=np.int32)
    nodes = nodes.reshape([n + 1 for n in k.shape])
    nz, ny, nx = k.shape
    at = [
        nodes[a >> 2 : nz + (a >> 2), a >> 1 & 1 : ny + (a >> 1 & 1), a & 1 : nx + (a & 1)].ravel()
        for a in range(8)
    ]
    corner = np.stack(at, axis=1)
    E = k.reshape(-1, 1, 1) * element_matrices(SPACING, "lumped")[0]
    where = (np.repeat(corner, 8, axis=1).ravel(), np.tile(corner, (1, 8)).ravel())
    return scipy.sparse.csr_matrix((E.ravel(), where), shape=(nodes.size, nodes.size))


def median(call) -> float:
    """Median seconds of a call."""
    found = []
    for _ in range(REPEATS):
        start = time.perf_counter()
        call()
        found.append(time.perf_counter() - start)
    return statistics.median(found)


def row(name: str, n: int, csr_s: float) -> dict[str, object]:
    """Set up and solve one part for a random right-hand side on two held faces."""
    k, spacing = parts(n)[name]
    held = np.zeros([m + 1 for m in k.shape], dtype=bool)
    held[0] = held[-1] = True
    heat = np.random.default_rng(1).standard_normal(held.shape)
    system = HeatSystem(k, spacing, held)
    start = time.perf_counter()
    system.solve(heat, maxiter=0, tol=np.inf)  # the hierarchy alone
    ready = time.perf_counter()
    _, run = system.solve(heat)
    done = time.perf_counter()
    return {
        "part": name,
        "voxels": k.size,
        "iterations": run.iterations,
        "residual": run.residual,
        "set_up_s": round(ready - start, 3),
        "solve_s": round(done - ready, 3),
        "solve_in_csr_products": round((done - ready) / csr_s, 1),
        "bytes_a_voxel": round(system.nbytes / k.size, 1),
    }


def main() -> None:
    """Print one JSON object."""
    sizes = [int(a) for a in sys.argv[1:]] or [16, 32, 33, 64]
    out: dict[str, object] = {"threads": int(threads())}
    rows = []
    row("homogeneous", 8, 1.0)  # compiles
    for n in sizes:
        k = np.ones((n, n, n))
        A = matrix(k)
        u = np.random.default_rng(0).standard_normal(A.shape[0])
        csr_s = median(lambda A=A, u=u: A @ u)
        system = HeatSystem(k, SPACING, np.zeros([n + 1] * 3, dtype=bool))
        T = u.reshape([n + 1] * 3)
        own_s = median(lambda system=system, T=T: system.apply(T))
        out[f"csr_over_matrix_free_{n}"] = round(csr_s / own_s, 2)
        rows += [row(name, n, csr_s) for name in parts(n)]
    out["rows"] = rows
    sys.stdout.write(json.dumps(out, indent=1) + "\n")


if __name__ == "__main__":
    main()

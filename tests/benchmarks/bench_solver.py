"""Every row that the solver holds to, measured in one run beside SciPy and pyamg; prints JSON.

Seconds depend on the machine and on who else uses it: gates are ratios within the run, counts and
bytes. ``--large`` adds cubes of 64, 128, 192 and 256, each in a process of its own, with peak
memory; a cube that does not fit in the free memory is left out with the reason.

Run: python tests/benchmarks/bench_solver.py [--size 48] [--hard 64] [--quick] [--large]
"""

from __future__ import annotations

import argparse
import json
import os
import platform
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import numpy as np
import psutil
import scipy.ndimage

sys.path.insert(0, str(Path(__file__).parent))

from solver_problems import (
    SPACING,
    amg_solve,
    assembled,
    by_node,
    cantilever,
    compare,
    lame,
    problem,
    rigid_modes,
    triad,
)

from voxelmat.fea.operator import Stiffness
from voxelmat.fea.sensitivity import stiffness_forms
from voxelmat.fea.system import LinearSystem
from voxelmat.kernels.threads import crew, threads

# Node vectors of the iteration beside the system: x, r, p, q; the load is the caller's.
VECTORS = 4
# Bytes a voxel that a cube is taken to need before it is tried, process included.
NEED = 400
LARGE = (64, 128, 192, 256)

Rows = list[dict[str, Any]]


def row(name: str, value: float, gate: str | None, **more: Any) -> dict[str, Any]:
    """One line of the table; `gate` reads like ``>= 25``, None marks a figure without one."""
    if gate is None:
        return {"row": name, "value": round(float(value), 3), "gate": None, "held": None, **more}
    sign, limit = gate.split()
    held = bool(value >= float(limit) if sign == ">=" else value <= float(limit))
    return {"row": name, "value": round(float(value), 3), "gate": gate, "held": held, **more}


def skipped(name: str, gate: str, reason: str) -> dict[str, Any]:
    """A line that could not be measured."""
    return {"row": name, "value": None, "gate": gate, "held": None, "skipped": reason}


def products(n: int, repeats: int) -> tuple[Rows, float]:
    """K u: ours against SciPy's CSR and against what memory can do; seconds of the CSR product."""
    lam, mu = problem("homogeneous", n)
    K = assembled(lam, mu)
    u = np.random.default_rng(0).standard_normal((3, n + 1, n + 1, n + 1))
    single, flat = u.astype(np.float32), by_node(u)
    K32, flat32 = K.astype(np.float32), flat.astype(np.float32)
    ours = Stiffness(lam, mu, SPACING)
    ours32 = Stiffness(lam.astype(np.float32), mu.astype(np.float32), SPACING)
    y, y32 = np.empty_like(u), np.empty_like(single)
    a, b, c = np.ones((3, 8_000_000))
    ours.apply(u, y)
    ours32.apply(single, y32)
    triad(a, b, c, 0.5)
    miss = float(np.abs(by_node(y) - K @ flat).max() / np.abs(y).max())
    with crew((n + 1) ** 3):
        d, s, csr, csr32, t = compare(
            lambda: ours.apply(u, y),
            lambda: ours32.apply(single, y32),
            lambda: K @ flat,
            lambda: K32 @ flat32,
            lambda: triad(a, b, c, 0.5),
            repeats=repeats,
        )
    rate = 24 * a.size / t  # bytes a second as STREAM counts: two reads, one write
    bound = (2 * u.nbytes + lam.nbytes + mu.nbytes) / rate
    note = {"voxels": n**3, "ns_a_voxel": round(1e9 * d / n**3, 2)}
    note32 = {"voxels": n**3, "ns_a_voxel": round(1e9 * s / n**3, 2)}
    return [
        row("operator against SciPy CSR, f64", csr / d, ">= 25", difference=miss, **note),
        row("operator against SciPy CSR, f32", csr32 / s, ">= 40", **note32),
        row("share of the triad bound, f64", bound / d, ">= 0.35", triad_GB_s=round(rate / 1e9, 1)),
        row("share of the triad bound, f32", bound / 2 / s, ">= 0.25"),
    ], csr / n**3


def solved(lam: np.ndarray, mu: np.ndarray) -> dict[str, Any]:
    """Set up and solve; figures of both."""
    fixed, b = cantilever(lam.shape)
    start = time.perf_counter()
    system = LinearSystem(lam, mu, SPACING, fixed)
    solution = system.solve(b)
    taken = time.perf_counter() - start
    return {
        "iterations": solution.iterations,
        "seconds": taken,
        "method": system.method,
        "bytes": system.nbytes + VECTORS * b.nbytes,
        "u": solution.u,
    }


def against_amg(n: int, csr: float) -> Rows:
    """Set-up and solve beside pyamg's, on the same matrix."""
    name, gate = "set-up and solve against pyamg set-up and solve", ">= 20"
    lam, mu = problem("homogeneous", n)
    fixed, b = cantilever(lam.shape)
    free = np.flatnonzero(~by_node(fixed))
    solved(lam, mu)  # compiles
    ours = solved(lam, mu)
    A = assembled(lam, mu)[free][:, free]
    try:
        x, count, theirs = amg_solve(A, by_node(b)[free], rigid_modes(lam.shape)[free])
    except ImportError as error:
        return [skipped(name, gate, f"pyamg is not there: {error}")]
    mine = by_node(ours["u"])[free]
    more = {
        "voxels": n**3,
        "iterations": ours["iterations"],
        "pyamg_iterations": count,
        "difference": float(np.abs(mine - x).max() / np.abs(x).max()),
        "csr_products": round(ours["seconds"] / (csr * n**3), 1),
    }
    return [row(name, theirs / ours["seconds"], gate, **more)]


def counts(sizes: list[int], hard: int, csr: float) -> Rows:
    """Iterations to 1e-8, with the time of set-up and solve in CSR products."""
    cases: list[tuple[str, int, str | None]] = [("homogeneous", n, "<= 12") for n in sizes]
    # Beside the gate's size, odd and even neighbours: what counts is how the network's members lie
    # on the coarse voxels, not whether the size is odd.
    cases += [("SIMP", hard, "<= 25"), *(("SIMP", hard + d, None) for d in (-1, 1, 2))]
    cases += [
        ("nu 0.49", hard, "<= 25"),
        ("nu 0.4995", hard, "<= 100"),
        ("random", hard, "<= 60"),
        ("dither", hard, "<= 150"),
    ]
    out = []
    for name, n, gate in cases:
        found = solved(*problem(name, n))
        multiple = round(found["seconds"] / (csr * n**3), 1)
        out.append(
            row(
                f"iterations, {name}, {n}^3",
                found["iterations"],
                gate,
                method=found["method"],
                csr_products=multiple,
            )
        )
    return out


def memory(n: int) -> Rows:
    """Bytes a voxel of both methods, and a solid voxel of a bar in an empty grid."""
    out = []
    for name in ("homogeneous", "nu 0.49"):
        found = solved(*problem(name, n))
        title = f"bytes a voxel, {found['method']}"
        out.append(row(title, found["bytes"] / n**3, "<= 390"))
    lam, mu = problem("homogeneous", n)
    solid = np.zeros(lam.shape, dtype=bool)
    solid[n // 3 : n // 3 + n // 4, n // 2 :] = True
    found = solved(lam * solid, mu * solid)
    out.append(row("bytes a solid voxel of a box in an empty grid, system only",
                   (found["bytes"] - VECTORS * 24 * (n + 1) ** 3) / solid.sum(), "<= 390",
                   share_of_grid=round(float(solid.mean()), 4)))  # fmt: skip
    return out


def simp(n: int, iterations: int, csr: float) -> Rows:
    """Density, filter and optimality criteria on an n x n/3 x n/3 cantilever, warm started.

    The classic loop (M. P. Bendsoe and O. Sigmund 2003, from memory), for the time alone.
    """
    shape = (n // 3, n // 3, n)
    fixed, b = cantilever(shape)
    lam1, mu1 = lame(1.0, 0.3)
    density, u, total, steps = np.full(shape, 0.3), None, 0, []
    for _ in range(iterations):
        start = time.perf_counter()
        E = 1e-9 + (1 - 1e-9) * density**3
        solution = LinearSystem(lam1 * E, mu1 * E, SPACING, fixed).solve(b, x0=u, tol=1e-5)
        u, total = solution.u, total + solution.iterations
        dlam, dmu = stiffness_forms(u, u, lam1 * E, mu1 * E, SPACING, "icmb")
        slope = 3 * density**2 * (lam1 * dlam + mu1 * dmu)
        slope = scipy.ndimage.gaussian_filter(slope * density, 0.8) / np.maximum(density, 1e-3)
        low, high = 0.0, float(slope.max()) * 1e3
        while high - low > 1e-6 * high:
            middle = (low + high) / 2
            step = density * np.sqrt(np.maximum(slope, 0) / middle)
            new = np.clip(np.clip(step, density - 0.2, density + 0.2), 1e-3, 1)
            low, high = (middle, high) if new.mean() > 0.3 else (low, middle)
        density = new
        steps.append(time.perf_counter() - start)
    fifty = 50 * float(np.mean(steps[1:])) / (csr * density.size)
    return [
        row(
            "SIMP, 50 iterations, in CSR products of its grid",
            fifty,
            "<= 800",
            voxels=density.size,
            measured_iterations=iterations,
            cg_iterations=total,
        )
    ]


def cube(n: int) -> dict[str, Any]:
    """A homogeneous cube in this process, with its peak memory."""
    solved(*problem("homogeneous", 16))  # compiles
    before = psutil.Process().memory_info().rss
    full = np.ones((n, n, n))
    lam, mu = (v * full for v in lame(1.0, 0.3))
    del full
    fixed, b = cantilever(lam.shape)
    start = time.perf_counter()
    system = LinearSystem(lam, mu, SPACING, fixed)
    system.solve(b, tol=0.5)  # sets up
    middle = time.perf_counter()
    solution = system.solve(b)
    taken = time.perf_counter() - middle
    import resource

    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024
    return {
        "n": n,
        "iterations": solution.iterations,
        "set_up_s": round(middle - start, 2),
        "solve_s": round(taken, 2),
        "ns_a_voxel_and_iteration": round(1e9 * taken / n**3 / solution.iterations, 2),
        "bytes_a_voxel": round((system.nbytes + VECTORS * b.nbytes) / n**3, 1),
        "peak_bytes_a_voxel": round((peak - before) / n**3, 1),
        "peak_GiB": round(peak / 2**30, 2),
    }


def large() -> Rows:
    """Cubes in processes of their own; time an iteration and a voxel must not grow by 30 %."""
    out: Rows = []
    for n in LARGE:
        free = psutil.virtual_memory().available
        if NEED * n**3 > free:
            reason = f"needs about {NEED * n**3 / 2**30:.1f} GiB, {free / 2**30:.1f} GiB are free"
            out.append(skipped(f"cube of {n}^3", "<= 24", reason))
            continue
        done = subprocess.run(
            [sys.executable, __file__, "--cube", str(n)], capture_output=True, text=True, check=True
        )
        found = json.loads(done.stdout)
        out.append(row(f"peak GiB, cube of {n}^3", found["peak_GiB"], "<= 24", **found))
    pace = [r["ns_a_voxel_and_iteration"] for r in out if "n" in r]
    if len(pace) > 1:
        name = "time an iteration and a voxel, largest over smallest of 128^3 and up"
        pace = pace[1:] if len(pace) > 2 else pace
        out.append(row(name, max(pace) / min(pace), "<= 1.3"))
    return out


def arguments() -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--size", type=int, default=64, help="edge of the cube beside SciPy, pyamg")
    parser.add_argument("--hard", type=int, default=64, help="edge of the hard cases")
    parser.add_argument("--quick", action="store_true", help="small and rough; gates may miss")
    parser.add_argument("--large", action="store_true", help="also 64^3 to 256^3")
    parser.add_argument("--cube", type=int, help=argparse.SUPPRESS)
    return parser.parse_args()


def main() -> int:
    """Print one JSON object; 1 where a gate is missed."""
    given = arguments()
    if given.cube:
        print(json.dumps(cube(given.cube)))
        return 0
    size, hard = (24, 24) if given.quick else (given.size, given.hard)
    sizes = [16, 17, 24] if given.quick else [16, 17, 31, 32, 33, 48, 63, 64]
    start = time.perf_counter()
    load = os.getloadavg()[0]
    rows, csr = products(size, 3 if given.quick else 9)
    rows += against_amg(size, csr)
    rows += counts(sizes, hard, csr)
    rows += memory(size)
    rows += simp(48 if given.quick else 96, 5 if given.quick else 12, csr)
    if given.large:
        rows += large()
    report = {
        "machine": platform.processor() or platform.machine(),
        "cores": psutil.cpu_count(logical=False),
        "threads": threads(),
        "load_before": round(load, 2),
        "seconds": round(time.perf_counter() - start, 1),
        "scipy_csr_ns_a_voxel": round(1e9 * csr, 1),
        "all_held": all(r["held"] is not False for r in rows),
        "rows": rows,
    }
    print(json.dumps(report, indent=2))
    return 0 if report["all_held"] else 1


if __name__ == "__main__":
    sys.exit(main())

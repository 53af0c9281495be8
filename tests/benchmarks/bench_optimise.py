"""The optimiser: seconds of an iteration, the optimiser's own share, many resins, a plain twin.

Seconds depend on the machine, so each is also given as a multiple of one SciPy CSR product of a
matrix with the rows and the fill of the same grid, measured in the same run: that multiple is the
gate. A product of the larger grids is that of the smaller one, scaled by rows, since a matrix of
a million voxels would take 3 GB. Prints one line of JSON a problem.

Run: python tests/benchmarks/bench_optimise.py [small|large|resins|twin] [iterations]

- small: 98,304 voxels, two resins and void, compliance under a mass limit (60 iterations).
- large: 1,019,200 voxels, the same (50 iterations).
- resins: pad of 9,408 voxels with a target deflection, K = 40 against K = 2 (10 iterations).
- twin: 24 x 8 x 8 voxels, against an assembled matrix and a sparse factorisation (6 iterations).
"""

import json
import sys
import time

import numpy as np
import scipy.sparse as sp
from scipy.sparse.linalg import splu

from voxelmat.fea.element import basis_matrices, coefficients
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.design_spec import (
    Compliance,
    DesignSpec,
    MassLimit,
    Projection,
    TargetDeflection,
)
from voxelmat.model.goal import AtMost
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.loadcase import Force, LoadCase, Support
from voxelmat.model.material import Constant, Material
from voxelmat.model.measure_amount import Mass
from voxelmat.model.part import Part
from voxelmat.model.region import Box, FaceRegion
from voxelmat.topopt.loop import State, Stopping, run
from voxelmat.topopt.method import stepper_of
from voxelmat.topopt.physics import Physics
from voxelmat.topopt.problem import start_of
from voxelmat.topopt.setup import layout_problem

#: Seconds of one product with 317,000 rows on the machine that the seconds of the gates are
#: meant for (two idle cores): they are turned into multiples with it.
REFERENCE_PRODUCT = 0.033
SMALL = (96, 32, 32)
GATES = {"small": 40.0 / 60, "large": 150.0 / 50}  # seconds of an iteration
NEVER = Stopping(gap=0.0, change=0.0)


def resin(name, E, density, nu=0.35):
    """Invented."""
    return Material(
        name=name,
        kind="rigid",
        E=Constant(value=E, unit="MPa"),
        nu=Constant(value=nu),
        density=Constant(value=density, unit="tonne/mm3"),
    )


def rows(shape):
    return 3 * int(np.prod([s + 1 for s in shape]))


def csr_product(shape):
    """Seconds of one product with a matrix of 81 entries a row, as a hex8 grid has."""
    n = rows(SMALL)
    offsets = np.arange(-40, 41) * max(1, n // 2000)
    K = sp.diags_array(np.ones((81, n)), offsets=offsets, shape=(n, n)).tocsr()
    x = np.ones(n)
    best = np.inf
    for _ in range(5):
        start = time.perf_counter()
        K @ x
        best = min(best, time.perf_counter() - start)
    return best * rows(shape) / n


def cantilever(shape):
    """x = 0 clamped, a line load at the lower edge of the far face; two resins and void."""
    nx, ny, _nz = shape
    part = Part(
        grid=VoxelGrid(shape=shape, spacing=(1.0, 1.0, 1.0)),
        resins=(resin("light", 500.0, 0.4e-9), resin("stiff", 2000.0, 1e-9)),
        palette=(EMPTY, Blend.pure("light")),
        labels=np.ones(shape, np.uint16),
    )
    case = LoadCase(
        name="tip",
        supports=(Support(region=FaceRegion(name="wall", side="x-")),),
        loads=(
            Force(
                region=Box(name="edge", low=(nx - 1.1, -1, -1), high=(nx + 1, ny + 1, 1.1)),
                vector=(0, 0, -1),
            ),
        ),
    )
    spec = DesignSpec(
        resins=("light", "stiff"),
        objective=Compliance(),
        filter_radius=1.6,
        limits=(MassLimit(mass=0.4e-9 * float(np.prod(shape))),),
        projection=Projection(sharpness=(0.0,)),
    )
    return layout_problem(part, [case], spec), spec


def pad(K):
    """28 x 28 x 12 on the ground, pressed in the middle, target .29 mm; density stands for cost."""
    shape = (28, 28, 12)
    E, nu = np.geomspace(1, 2000, K), np.linspace(0.49, 0.35, K)
    cost = [1.0, 2.0] if K == 2 else np.random.default_rng(0).uniform(1, 3, K)
    names = tuple(f"r{m}" for m in range(K))
    part = Part(
        grid=VoxelGrid(shape=shape, spacing=(1.0, 1.0, 1.0)),
        resins=tuple(resin(*v) for v in zip(names, E, np.array(cost) * 1e-9, nu, strict=True)),
        palette=(EMPTY, Blend.pure("r0")),
        labels=np.ones(shape, np.uint16),
    )
    case = LoadCase(
        name="press",
        supports=(Support(region=FaceRegion(name="floor", side="z-")),),
        loads=(Force(region=FaceRegion(name="top", side="z+"), vector=(0, 0, -70.0)),),
    )
    nodes = np.zeros(part.grid.node_shape, bool)
    nodes[:, :, -1] = True
    limit = (1.6 if K == 2 else 1.45) * 1e-9 * float(np.prod(shape))
    spec = DesignSpec(
        resins=names,
        void=False,
        objective=TargetDeflection(nodes=nodes, target=np.where(nodes, -0.2901, 0.0)),
        limits=(AtMost(measure=Mass(), value=limit),),
        filter_radius=1.8,
        move=0.5,
    )
    return layout_problem(part, [case], spec), spec


class Clock:
    """Notes when each iteration was reported, and how long the optimiser itself took."""

    def __init__(self, stepper):
        self.at, self.own, self._stepper = [], [], stepper

    def __getattr__(self, name):
        return getattr(self._stepper, name)

    def step(self, *arguments):
        start = time.perf_counter()
        new = self._stepper.step(*arguments)
        self.own.append(time.perf_counter() - start)
        return new

    def report(self, stage, **figures):
        self.at.append(time.perf_counter())


def iterate(problem, spec, iterations):
    """Median seconds of an iteration and of the optimiser in it, and the history."""
    clock = Clock(stepper_of(spec, problem))
    x = start_of(spec, problem.unknowns, problem.bounds)
    out = run(
        problem, clock, State(x=x, whole=x), iterations=iterations, stopping=NEVER, monitor=clock
    )
    steps = np.diff(clock.at)  # leaves the first out, which may compile
    return float(np.median(steps)), float(np.median(clock.own[1:])), out.state.history


def beam(name, shape, iterations):
    (problem, _), spec = cantilever(shape)
    product = csr_product(shape)
    each, own, history = iterate(problem, spec, iterations)
    again = csr_product(shape)  # the load of the machine may have changed meanwhile
    product = 0.5 * (product + again)
    gate = GATES[name] / (REFERENCE_PRODUCT * rows(shape) / rows(SMALL))
    return {
        "problem": name,
        "voxels": int(np.prod(shape)),
        "unknowns": problem.unknowns.n,
        "iterations": iterations,
        "seconds_per_iteration": round(each, 3),
        "seconds_all": round(each * iterations, 1),
        "csr_product_seconds": round(product, 4),
        "products_per_iteration": round(each / product, 1),
        "gate_products_per_iteration": round(gate, 1),
        "own_share": round(own / each, 3),
        "gate_own_share": 0.25,
        "cg_iterations": sum(r.cg_iterations for r in history),
        "objective_N_mm": history[-1].objective,
        "violation": history[-1].violation,
        "passed": each / product <= gate and own / each <= 0.25,
    }


def resins(iterations):
    """Interleaved, so that both see the same load of the machine."""
    seconds, shares, reached = {2: [], 40: []}, {2: [], 40: []}, {}
    for _ in range(3):
        for K in seconds:
            (problem, _), spec = pad(K)
            each, own, history = iterate(problem, spec, iterations)
            seconds[K].append(each)
            shares[K].append(own / each)
            reached[K] = history[-1].objective
    ratio = min(seconds[40]) / min(seconds[2])
    return {
        "problem": "resins",
        "voxels": 28 * 28 * 12,
        "iterations": iterations,
        "seconds_per_iteration": {K: round(min(s), 3) for K, s in seconds.items()},
        "own_share": {K: round(min(s), 3) for K, s in shares.items()},
        "relative_error": reached,
        "ratio_40_to_2": round(ratio, 2),
        "gate_ratio": 3.0,
        "goal_ratio": 1.5,
        "passed": ratio <= 3.0,
    }


class Answer:
    iterations = 1

    def __init__(self, u):
        self.u = u


class Assembled:
    """Same interface as the solver, but a SciPy matrix and its factorisation."""

    def __init__(self, lam, mu, spacing, fixed, *, springs, element, monitor):
        nz, ny, nx = lam.shape
        number = np.arange(fixed.size).reshape(fixed.shape)
        at = np.stack([
            number[c, a >> 2 : nz + (a >> 2), (a >> 1 & 1) : ny + (a >> 1 & 1),
                   (a & 1) : nx + (a & 1)].ravel()
            for a in range(8) for c in range(3)
        ])  # fmt: skip
        values = sum(
            B[:, :, None] * v.ravel()
            for B, v in zip(
                basis_matrices(spacing, element), coefficients(lam, mu, element), strict=True
            )
        )
        i, j = at[:, None].repeat(24, 1), at[None].repeat(24, 0)
        K = sp.coo_array((values.ravel(), (i.ravel(), j.ravel()))).tocsc()
        self._free = np.flatnonzero(~fixed.ravel())
        self._factors = splu(K[self._free][:, self._free])
        self._shape = fixed.shape

    def solve(self, b, *, x0=None, tol=0.0):
        u = np.zeros(b.size)
        u[self._free] = self._factors.solve(b.ravel()[self._free])
        return Answer(u.reshape(self._shape))


def twin(iterations):
    """Ours and the twin, iteration for iteration the same problem."""
    shape, out = (24, 8, 8), {}
    for name in ("ours", "twin"):
        (problem, _), spec = cantilever(shape)
        if name == "twin":
            p = problem.physics
            problem.physics = Physics(p.cases, (1.0, 1.0, 1.0), system=Assembled)
        each, _, history = iterate(problem, spec, iterations)
        out[name] = each, history[-1].objective
    return {
        "problem": "twin",
        "voxels": int(np.prod(shape)),
        "iterations": iterations,
        "seconds_per_iteration": {k: round(v[0], 4) for k, v in out.items()},
        "objective_N_mm": {k: v[1] for k, v in out.items()},
        "twin_over_ours": round(out["twin"][0] / out["ours"][0], 1),
        "passed": abs(out["twin"][1] / out["ours"][1] - 1) < 1e-3,
    }


def main():
    which = sys.argv[1] if len(sys.argv) > 1 else "all"
    asked = int(sys.argv[2]) if len(sys.argv) > 2 else None
    problems = {
        "twin": lambda: twin(asked or 6),
        "resins": lambda: resins(asked or 10),
        "small": lambda: beam("small", SMALL, asked or 60),
        "large": lambda: beam("large", (208, 70, 70), asked or 50),
    }
    for name, problem in problems.items():
        if which in (name, "all"):
            print(json.dumps(problem()), flush=True)


if __name__ == "__main__":
    main()

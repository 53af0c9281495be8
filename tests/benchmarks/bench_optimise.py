"""Two resins and void on a cantilever: seconds by stage, CG iterations; prints one line of JSON.

Seconds depend on the machine, so each is also given as a multiple of one SciPy CSR product of a
matrix with the rows and the fill of the same grid, measured in the same run.

Run: python tests/benchmarks/bench_optimise.py [voxels_along_x] [iterations]
"""

import json
import sys
import time

import numpy as np
import scipy.sparse as sp

from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.design_spec import Compliance, DesignSpec, MassLimit, Projection
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.loadcase import Force, LoadCase, Support
from voxelmat.model.material import Constant, Material
from voxelmat.model.part import Part
from voxelmat.model.region import Box, FaceRegion
from voxelmat.topopt.optimise import optimise


def resin(name, E, density):
    """Invented."""
    return Material(
        name=name,
        kind="rigid",
        E=Constant(value=E, unit="MPa"),
        nu=Constant(value=0.35),
        density=Constant(value=density, unit="tonne/mm3"),
    )


def csr_product(shape):
    """Seconds of one product with a matrix of 81 entries a row, as a hex8 grid has."""
    n = 3 * int(np.prod([s + 1 for s in shape]))
    offsets = np.arange(-40, 41) * max(1, n // 2000)
    K = sp.diags_array(np.ones((81, n)), offsets=offsets, shape=(n, n)).tocsr()
    x = np.ones(n)
    best = np.inf
    for _ in range(5):
        start = time.perf_counter()
        K @ x
        best = min(best, time.perf_counter() - start)
    return best


class Clock:
    """Notes when each iteration was reported."""

    def __init__(self):
        self.at = {0: time.perf_counter()}

    def report(self, stage, *, done, total, **figures):
        self.at.setdefault(done, time.perf_counter())


def main():
    n = int(sys.argv[1]) if len(sys.argv) > 1 else 48
    iterations = int(sys.argv[2]) if len(sys.argv) > 2 else 20
    shape = (n, n // 3, n // 3)
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
                region=Box(name="edge", low=(n - 1.1, -1, -1), high=(n + 1, n, 1.1)),
                vector=(0, 0, -1),
            ),
        ),
    )
    spec = DesignSpec(
        resins=("light", "stiff"),
        objective=Compliance(),
        filter_radius=1.6,
        limits=(MassLimit(mass=0.4e-9 * float(np.prod(shape))),),
        iterations=iterations,
        projection=Projection(sharpness=(0.0,)),
    )
    product = csr_product(shape)
    clock = Clock()
    result = optimise(part, [case], spec, monitor=clock)
    end = time.perf_counter()
    times = [clock.at[k] for k in sorted(clock.at)]
    steps = np.diff(times)[1:]  # the first holds the compile
    out = {
        "voxels": int(np.prod(shape)),
        "iterations": result.iterations,
        "seconds_per_iteration": round(float(np.median(steps)), 4),
        "csr_products_per_iteration": round(float(np.median(steps)) / product, 1),
        "seconds_of_last_solves_and_outline": round(end - times[-1], 3),
        "cg_iterations": sum(r.cg_iterations for r in result.history),
        "objective_N_mm": result.objective,
        "grey": round(result.history[-1].grey, 3),
        "reason": result.reason,
    }
    print(json.dumps(out))


if __name__ == "__main__":
    main()

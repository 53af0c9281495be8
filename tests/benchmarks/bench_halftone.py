"""Halftones side by side in one run: rates, and how even they are; prints one line of JSON.

Run: python tests/benchmarks/bench_halftone.py [width_mm]
"""

import itertools
import json
import sys
import time
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))

from dithered_block import BLENDS, block, statistics
from print_twins import HARD, MID, SOFT, resin, sphere_distance

from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.halftone import METHODS, Halftone
from voxelmat.model.part import Part
from voxelmat.printing.halftone import Slicer, packed_planes
from voxelmat.printing.place import place
from voxelmat.printing.profile import load_profile
from voxelmat.printing.support import outline_box


def dome(width, blends, resins):
    """A dome in slices along x, one a blend (invented)."""
    h = 0.3
    n = (round(width / h), round(0.8 * width / h), round(0.2 * width / h))
    grid = VoxelGrid(shape=n, spacing=(h, h, h))
    distance = sphere_distance(grid, (width / 2, 0.4 * width, -0.5 * width), 0.68 * width)
    label = 1 + np.arange(n[0]) * len(blends) // n[0]
    return Part(
        grid=grid,
        resins=resins,
        palette=(EMPTY, *blends),
        labels=np.where(distance < 16, label[:, None, None], 0),
        distance=distance,
    )


def graded(width):
    """Three resins in 64 steps."""
    steps = np.linspace(0, 1, 64)
    blends = [
        Blend.of({"hard": (1 - s) ** 2 + 0.02, "soft": s**2 + 0.02, "mid": 2 * s * (1 - s) + 0.02})
        for s in steps
    ]
    return dome(width, blends, (HARD, SOFT, MID))


def many(width, count):
    """As many resins, each slice a blend of its neighbours in the list."""
    names = [f"r{m:02d}" for m in range(count)]
    blends = [Blend.of({a: 1, b: 1}) for a, b in itertools.pairwise(names)]
    return dome(width, blends, tuple(resin(name) for name in names))


def rate(part, halftone, layers=24):
    """Million sites a CPU second to bits, and of those the sites that are laid."""
    raster = place(outline_box(part), load_profile("invented-standard"))
    resins = tuple(m.name for m in part.resins)
    slicer = Slicer(part, raster, resins, support=False, seed=1, halftone=halftone)
    list(slicer.layers(0, 2))  # compile
    start = time.process_time()
    laid = 0
    for sites in slicer.sites(0, layers):
        for _ in packed_planes(sites, slicer.n_channels):
            pass
        laid += np.count_nonzero(sites)
    seconds = time.process_time() - start
    _, rows, columns = raster.image_shape
    return {
        "Msites_per_cpu_s": round(rows * columns * layers / seconds / 1e6, 1),
        "Mlaid_per_cpu_s": round(laid / seconds / 1e6, 1),
    }


def table():
    """Window statistics of each set of blends and method, and times better than white."""
    out = {}
    for name in BLENDS:
        rows = {method: statistics(*block(name, method)) for method in METHODS}
        white = rows["hash noise"]
        for method, row in rows.items():
            better = {f"white_over_{k}": white[k] / row[k] for k in ("rms8", "rms16")}
            out[f"{name} | {method}"] = {k: float(f"{v:.3g}") for k, v in {**row, **better}.items()}
    return out


def main(width=40.0):
    part = graded(width)
    sharp = dome(width, [Blend.pure(n) for n in ("hard", "soft", "mid")], (HARD, SOFT, MID))
    rates = {method: rate(part, Halftone(method=method)) for method in METHODS}
    rates["hard interfaces"] = rate(sharp, Halftone())
    rates["interfaces over 0.6 mm"] = rate(sharp, Halftone(interface_width_mm=0.6))
    rates["40 resins"] = rate(many(width, 40), Halftone())
    rates["40 resins, error diffusion"] = rate(
        many(width / 2, 40), Halftone(method="error diffusion"), layers=8
    )
    print(json.dumps({"benchmark": "halftones, one core", "rates": rates, "windows": table()}))


if __name__ == "__main__":
    main(*map(float, sys.argv[1:]))

"""Fused slicing against NumPy and Pillow in one run, same bits; prints one line of JSON.

Run: python tests/benchmarks/bench_slicing.py [width_mm]
"""

import io
import json
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
from PIL import Image

sys.path.insert(0, str(Path(__file__).parents[1]))

from print_twins import HARD, MID, SOFT, NumpySlicer, sphere_distance

from voxelmat.io.png import encode_bitmap
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part
from voxelmat.printing.designed import used_resins
from voxelmat.printing.halftone import Slicer
from voxelmat.printing.place import place
from voxelmat.printing.preflight import preflight
from voxelmat.printing.profile import load_profile
from voxelmat.printing.stack import write_stack
from voxelmat.printing.support import outline_box, outline_field


def graded_dome(width):
    """A dome, graded along x over three resins in 64 steps (invented)."""
    h = 0.3
    n = (round(width / h), round(0.8 * width / h), round(0.2 * width / h))
    grid = VoxelGrid(shape=n, spacing=(h, h, h))
    distance = sphere_distance(grid, (width / 2, 0.4 * width, -0.5 * width), 0.68 * width)
    t = np.linspace(0, 1, 64)
    blends = [
        Blend.of({"hard": (1 - s) ** 2 + 0.02, "soft": s**2 + 0.02, "mid": 2 * s * (1 - s) + 0.02})
        for s in t
    ]
    label = 1 + np.arange(n[0]) * 64 // n[0]
    labels = np.where(distance < 16, label[:, None, None], 0)
    return Part(
        grid=grid,
        resins=(HARD, SOFT, MID),
        palette=(EMPTY, *blends),
        labels=labels,
        distance=distance,
    )


def timed(call, layers):
    start = time.process_time()
    results = [call(k) for k in layers]
    return time.process_time() - start, results


def checked(part):
    """CPU seconds to write a whole stack and to check it."""
    with tempfile.TemporaryDirectory() as folder:
        start = time.process_time()
        stack = write_stack(part, load_profile("invented-standard"), Path(folder) / "s")
        written = time.process_time()
        findings = preflight(stack, part)
        return written - start, time.process_time() - written, findings


def main(width=60.0):
    part = graded_dome(width)
    raster = place(outline_box(part, outline_field(part)), load_profile("invented-standard"))
    resins = used_resins(part)
    fused = Slicer(part, raster, resins, support=True, seed=1)
    twin = NumpySlicer(part, raster, resins, support=True, seed=1)
    n_layers, rows, columns = raster.image_shape
    middle = n_layers // 3
    many, few = range(middle, middle + 40), range(middle, middle + 4)
    list(fused.layers(0, 1))  # compile

    def fused_layers(first):
        ppm = raster.pixels_per_metre
        slab = fused.layers(first, first + len(many))
        return [[encode_bitmap(p, columns, ppm) for p in bits] for bits in slab]

    def numpy_layer(k):
        site = twin.sites(k)
        files = []
        for m in range(len(resins) + 1):
            handle = io.BytesIO()
            Image.fromarray(site == m + 1).save(handle, "PNG")
            files.append(handle.getvalue())
        return files

    fused_s, (fused_files,) = timed(fused_layers, [middle])
    twin_s, twin_files = timed(numpy_layer, few)
    for ours, theirs in zip(fused_files, twin_files, strict=False):
        for a, b in zip(ours, theirs, strict=True):
            same = np.array_equal(*(np.asarray(Image.open(io.BytesIO(f))) for f in (a, b)))
            if not same:
                raise SystemExit("The two do not give the same bits.")
    sites = rows * columns
    fused_rate = sites * len(many) / fused_s / 1e6
    twin_rate = sites * len(few) / twin_s / 1e6
    checked(graded_dome(6.0))  # compile
    write_s, check_s, findings = checked(part)
    print(
        json.dumps(
            {
                "benchmark": "slicing, layer to PNG, one core",
                "sites_a_layer": sites,
                "channels": len(resins) + 1,
                "fused_Msites_per_cpu_s": round(fused_rate, 1),
                "numpy_pillow_Msites_per_cpu_s": round(twin_rate, 2),
                "ratio": round(fused_rate / twin_rate, 1),
                "same_bits": True,
                "write_stack_cpu_s": round(write_s, 2),
                "preflight_cpu_s": round(check_s, 2),
                "preflight_over_write": round(check_s / write_s, 2),
                "findings": len(findings),
            }
        )
    )


if __name__ == "__main__":
    main(*map(float, sys.argv[1:]))

"""Fused slicing against NumPy and Pillow, one worker against two; prints a line of JSON each.

Run: python tests/benchmarks/bench_slicing.py [width_mm] [--lattice] [--demo]

``--lattice`` writes a graded sheet lattice of 100 x 80 x 20 mm (a formula, invented) at 600 x 300
dpi x 27 um, 1.65e9 sites, with support, by one worker process and by two, and checks the stack.
``--demo`` writes and checks the stack of the demo design.
"""

import io
import json
import os
import shutil
import statistics
import sys
import tempfile
import time
from fractions import Fraction
from pathlib import Path

import numpy as np
from PIL import Image

sys.path.insert(0, str(Path(__file__).parents[1]))

from big_designs import Sheet
from print_twins import HARD, MID, SOFT, NumpySlicer, sphere_distance

from voxelmat.io.png import encode_bitmap
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part
from voxelmat.monitor import SILENT
from voxelmat.printing.designed import used_resins
from voxelmat.printing.halftone import Slicer
from voxelmat.printing.job import one_part_job
from voxelmat.printing.journal import Journal
from voxelmat.printing.place import place
from voxelmat.printing.preflight import preflight
from voxelmat.printing.profile import load_profile
from voxelmat.printing.readback import read_stack
from voxelmat.printing.stack import write_job, write_stack
from voxelmat.printing.support import outline_box, outline_field
from voxelmat.printing.workers import write_apart
from voxelmat.printing.writer import image_files


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


def check_times(stack, part, written):
    """CPU seconds of the packed checks, of comparing with the design, and of the 3-D checks."""
    seconds = []
    for design, deep in ((None, False), (part, False), (part, True)):
        start = time.process_time()
        findings = preflight(stack, design, deep=deep)
        seconds.append(time.process_time() - start)
    packed, compared, deep = seconds[0], seconds[1] - seconds[0], seconds[2] - seconds[1]
    return {
        "packed_checks_cpu_s": round(packed, 2),
        "packed_over_write": round(packed / written, 2),
        "comparison_with_design_cpu_s": round(compared, 2),
        "comparison_over_write": round(compared / written, 2),
        "checks_3d_cpu_s": round(deep, 2),
        "checks_3d_over_write": round(deep / written, 2),
        "findings": sorted({f.code for f in findings}),
    }


def checked(part):
    """CPU seconds to write a whole stack, and what checking it takes."""
    with tempfile.TemporaryDirectory() as folder:
        start = time.process_time()
        stack = write_stack(part, load_profile("invented-standard"), Path(folder) / "s")
        written = time.process_time() - start
        return written, check_times(stack, part, written)


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
    write_s, checks = checked(part)
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
                **checks,
            }
        )
    )


def by_workers(job, folder, workers):
    """Wall and CPU seconds in which so many worker processes write the layers of a job."""
    images = image_files(job)
    partial = folder / f"{workers}.partial"
    journal = Journal(partial, "bench", images.folders, images.names, resume=False)
    start, before = time.perf_counter(), os.times()
    write_apart(job, folder / str(workers), journal, SILENT, workers, None, 16)
    seconds, after = time.perf_counter() - start, os.times()
    journal.close()
    shutil.rmtree(partial)
    cpu = after.children_user + after.children_system
    cpu -= before.children_user + before.children_system
    digests = [journal.done[k].sha256 for k in sorted(journal.done)]
    return seconds, cpu, digests


def lattice():
    """End to end on a graded lattice, and what a second worker gains."""
    profile = load_profile("invented-standard").replace(layer=Fraction(27, 1000))
    part = Sheet((333, 266, 66)).part()
    job = one_part_job(part, profile, support="columns")
    layers, rows, columns = job.window.image_shape
    sites = layers * rows * columns
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        # Alternating, for whatever else runs here comes and goes.
        runs = [(n, *by_workers(job, folder, n)) for n in (1, 2) * 3]
        if any(r[3] != runs[0][3] for r in runs):
            raise SystemExit("Two workers do not write the bytes of one.")
        (one, one_cpu), (two, two_cpu) = (
            [statistics.median(r[k] for r in runs if r[0] == n) for k in (1, 2)] for n in (1, 2)
        )
        start, wall = time.process_time(), time.perf_counter()
        write_job(job, folder / "s", threads=1)
        written, wall = time.process_time() - start, time.perf_counter() - wall
        stack = read_stack(folder / "s")
        size = sum(f.stat().st_size for f in (folder / "s").rglob("*.png"))
        checks = check_times(stack, part, written)
    return {
        "benchmark": "graded lattice, end to end",
        "sites": sites,
        "channels": len(job.channel_names),
        "one_worker_s": round(one, 2),
        "two_workers_s": round(two, 2),
        "two_over_one": round(one / two, 2),
        "one_worker_cpu_s": round(one_cpu, 2),
        "two_workers_cpu_s": round(two_cpu, 2),
        "same_bytes": True,
        "write_job_cpu_s": round(written, 2),
        "write_job_wall_s": round(wall, 2),
        "Msites_per_cpu_s": round(sites / written / 1e6, 1),
        "MB": round(size / 1e6, 1),
        **checks,
        "load": os.getloadavg()[0],
    }


def demo():
    """The stack of the demo design, written and checked."""
    from voxelmat.workflow.build import build

    built = build(Path(__file__).parents[2] / "notebooks" / "grip" / "grip.toml")
    print_table = built.design.printing
    with tempfile.TemporaryDirectory() as folder:
        start = time.process_time()
        stack = write_stack(
            built.part,
            built.profile,
            Path(folder) / "s",
            orientation=print_table.orientation,
            support=print_table.support,
            threads=1,
        )
        written = time.process_time() - start
        checks = check_times(stack, built.part, written)
    layers, rows, columns = stack.raster.image_shape
    sites = layers * rows * columns
    return {
        "benchmark": "demo, end to end",
        "sites": sites,
        "write_stack_cpu_s": round(written, 2),
        "Msites_per_cpu_s": round(sites / written / 1e6, 1),
        **checks,
    }


if __name__ == "__main__":
    words = [w for w in sys.argv[1:] if not w.startswith("--")]
    main(*map(float, words))
    if "--lattice" in sys.argv:
        print(json.dumps(lattice()))
    if "--demo" in sys.argv:
        print(json.dumps(demo()))

"""A full invented tray of 4e11 sites and the far corner of 1.5e12: time, memory, JSON.

Run: python tests/benchmarks/bench_tray.py [--layers 200] [--height 200] [--folder FOLDER]

The tray (500 x 400 x 200 mm, 600 x 300 dpi x 30 um) is filled by a graded sheet lattice of 7
resins in 0.3 mm voxels, kept in a part store, with support: 8 channels. Worker processes then
write 10 layers, and `--layers` consecutive layers from the middle of the height, to disk through
the same function as ``voxelmat stack --workers``; each reports its own peak memory.

Extrapolation: (CPU seconds of the long run less those of the short one) / (layers between them),
times the layers of the tray, plus what was measured once: filling the store is reported apart.

The far corner: the last ten layers of a window that covers a whole tray of 600 x 600 dpi x 15 um
are made and thrown away; a small window in the far corner must give the same bits there.
"""

import argparse
import json
import os
import subprocess
import sys
import tempfile
import time
from fractions import Fraction
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))

from big_designs import Sheet

from voxelmat.model.halftone import Halftone
from voxelmat.printing.halftone import Slicer
from voxelmat.printing.job import one_part_job
from voxelmat.printing.jobfolder import described, load_job
from voxelmat.printing.profile import load_profile
from voxelmat.printing.raster import Raster
from voxelmat.printing.source import source_of
from voxelmat.printing.workers import write_slab

VOXEL = 0.3  # mm


def peak_mb():
    """Peak resident memory of this process since it began, MB (Linux)."""
    for line in Path("/proc/self/status").read_text().splitlines():
        if line.startswith("VmHWM"):
            return int(line.split()[1]) / 1024
    raise SystemExit("no VmHWM in /proc/self/status")


def child(place, partial, first, last):
    """Write a slab as a worker does and say what it took."""
    start = time.process_time()
    records = write_slab(place, partial, first, last)
    sites = [sum(r.sites[c] for r in records) for c in range(len(records[0].sites))]
    print(
        json.dumps(
            {
                "layers": len(records),
                "cpu_s": round(time.process_time() - start, 2),
                "peak_MB": round(peak_mb(), 1),
                "sites": sites,
            }
        )
    )


def in_a_process(*words):
    """The JSON that this script prints in a process of its own."""
    command = [sys.executable, __file__, *map(str, words)]
    environment = {**os.environ, "NUMBA_NUM_THREADS": "1", "OPENBLAS_NUM_THREADS": "1"}
    run = subprocess.run(command, env=environment, stdout=subprocess.PIPE, check=True)
    return json.loads(run.stdout)


def tray_profile():
    """The invented standard profile with seven model channels."""
    profile = load_profile("invented-standard")
    channels = {**{f"m{n}": "" for n in range(1, 8)}, "support": "support"}
    return profile.replace(channels=channels)


def full_tray(folder, layers, height):
    """Fill the store, then write layers in worker processes."""
    profile = tray_profile()
    room = (490.0, 390.0, height)
    shape = tuple(int(r / VOXEL) for r in room)
    start = time.process_time()
    part = Sheet(shape, VOXEL, n_resins=7).store(folder / "part")
    filled = time.process_time()
    job = one_part_job(part, profile, support="columns")
    total, rows, columns = job.window.image_shape
    partial = folder / "s.partial"
    for channel in job.channel_names:
        (partial / channel).mkdir(parents=True)
    with described(job, folder / "s") as place:
        source_of(load_job(place), place)  # the support field
        ready = time.process_time()
        middle = max(0, (total - layers) // 2)
        short, long = (
            in_a_process("--child", place, partial, middle, middle + n) for n in (10, layers)
        )
    size = sum(f.stat().st_size for f in partial.rglob("*.png")) / layers
    sites = rows * columns
    a_layer = (long["cpu_s"] - short["cpu_s"]) / max(layers - 10, 1)
    full = total if height == 200 else 200.0 / height * total
    return {
        "voxels": list(shape),
        "image": [total, rows, columns],
        "sites": sites * total,
        "channels": len(job.channel_names),
        "layers_written": layers,
        "fill_store_cpu_s": round(filled - start, 1),
        "plan_and_support_cpu_s": round(ready - filled, 1),
        "store_MB": round(sum(f.stat().st_size for f in (folder / "part").rglob("*")) / 1e6),
        "cpu_s_a_layer": round(a_layer, 3),
        "Msites_per_cpu_s": round(sites / a_layer / 1e6, 1),
        "peak_MB_10_layers": short["peak_MB"],
        "peak_MB_all_layers": long["peak_MB"],
        "peak_growth": round(long["peak_MB"] / short["peak_MB"] - 1, 4),
        "MB_a_layer": round(size / 1e6, 2),
        "extrapolated_200_mm": {
            "layers": round(full),
            "cpu_min": round(full * a_layer / 60, 1),
            "GB": round(full * size / 1e9, 1),
        },
    }


def corner(pitch, tray, window, offset):
    """A raster without turn at `offset` of a tray, all layers."""
    return Raster(
        pitch=pitch,
        shape=(*window, tray[2]),
        offset=(*offset, 0),
        rotation=((1, 0, 0), (0, 1, 0), (0, 0, 1)),
        translation=(0.0, 0.0, 0.0),
        tray_sites=tray[:2],
        origin_corner="front left",
        row_direction="x",
    )


def far_corner(method, layers):
    """The last layers of a whole tray of 1.49e12 sites against a small window there."""
    dpi = Fraction(254, 10)
    pitch = (dpi / 600, dpi / 600, Fraction(15, 1000))
    # L2 of the check values: 500 x 400 x 200 mm at 600 x 600 dpi and 15 um, 1.49e12 sites.
    tray = tuple(int(s / p) for s, p in zip((500, 400, 200), pitch, strict=True))
    part = Sheet(tuple(int(s / VOXEL) for s in (500, 400, 200)), VOXEL, n_resins=7)
    resins = tuple(m.name for m in part.resins)
    options = {"support": False, "seed": 5, "halftone": Halftone(method=method)}
    small = (301, 203)
    offset = (tray[0] - small[0], tray[1] - small[1])
    whole = Slicer(part, corner(pitch, tray, tray[:2], (0, 0)), resins, **options)
    near = Slicer(part, corner(pitch, tray, small, offset), resins, **options)
    last = tray[2]
    start, set_sites = time.process_time(), 0
    # The design ends a fraction of a voxel below the tray: go down to where there are sites.
    top = int(part.grid.upper[2] / float(pitch[2]))
    first = min(last, top) - layers
    wanted = list(near.layers(first, first + layers))
    for layer, bits in enumerate(whole.layers(first, first + layers)):
        byte = offset[0] // 8
        crop = np.unpackbits(bits[:, -small[1] :, byte:], axis=2)
        crop = crop[:, :, offset[0] - 8 * byte : tray[0] - 8 * byte]
        ours = np.unpackbits(wanted[layer], axis=2)[:, :, : small[0]]
        if not np.array_equal(crop, ours):
            raise SystemExit(f"{method}: layer {first + layer} differs in the far corner")
        set_sites += int(ours.sum())
        del bits, crop
    print(
        json.dumps(
            {
                "sites": tray[0] * tray[1] * tray[2],
                "layers": [first, first + layers],
                "last_site_number": (first + layers - 1) * tray[0] * tray[1],
                "same_bits": True,
                "sites_set_in_the_corner": set_sites,
                "cpu_s_with_compare": round(time.process_time() - start, 1),
                "peak_MB": round(peak_mb(), 1),
            }
        )
    )


def main():
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--layers", type=int, default=200)
    parser.add_argument("--height", type=float, default=200.0, help="mm of the tray that is filled")
    parser.add_argument("--folder", type=Path)
    parser.add_argument("--child", nargs=4, metavar=("PLACE", "PARTIAL", "FIRST", "LAST"))
    parser.add_argument("--corner", nargs=2, metavar=("METHOD", "LAYERS"))
    options = parser.parse_args()
    if options.child:
        place, partial, first, last = options.child
        child(place, partial, int(first), int(last))
        return
    if options.corner:
        far_corner(options.corner[0], int(options.corner[1]))
        return
    with tempfile.TemporaryDirectory(dir=options.folder) as folder:
        tray = full_tray(Path(folder), options.layers, options.height)
    corners = {
        f"{m}, {n} layers": in_a_process("--corner", m, n)
        for m, n in (("blue noise", 3), ("blue noise", 10), ("hash noise", 3))
    }
    load = os.getloadavg()[0]
    print(json.dumps({"benchmark": "tray", "load": load, "tray": tray, "far_corner": corners}))


if __name__ == "__main__":
    main()

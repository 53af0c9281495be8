"""How fast the workbench answers, and that it does not grow: JSON.

Run: python tests/benchmarks/bench_workbench.py [--only SECTION ...] [--design FILE]

Without a design it takes ``notebooks/grip/grip.toml``. Times are from the message that the browser
sends to the picture that goes back, in one process; what the browser adds is not in them.
"""

import argparse
import gc
import json
import shutil
import tempfile
import time
from pathlib import Path

import numpy as np

from voxelmat.workbench.app import open_workbench

ROOT = Path(__file__).resolve().parents[2]


def resident_mb():
    """Resident memory of this process now, MB (Linux)."""
    for line in Path("/proc/self/status").read_text().splitlines():
        if line.startswith("VmRSS"):
            return int(line.split()[1]) / 1024
    raise SystemExit("no VmRSS in /proc/self/status")


def milliseconds(action, times):
    """Median and 95 % of the time that ``action(n)`` takes, ms."""
    taken = []
    for n in range(times):
        start = time.perf_counter()
        action(n)
        taken.append(1e3 * (time.perf_counter() - start))
    low, high = np.percentile(taken, [50, 95])
    return {"median_ms": round(float(low), 1), "p95_ms": round(float(high), 1)}


def space(bench):
    """The picture in space: turning, cutting, picking, colours; memory over 500 redraws."""
    view = bench.stage.space
    grid = bench.part.grid

    def told(**message):
        view._told(None, message, [])

    found = {"grid": list(grid.shape), "quads": len(view._surface.quads)}
    view.cut_away(0.0, "y")
    told(kind="turn", dx=1, dy=0, moving=True)
    found["orbit_frame"] = {
        **milliseconds(lambda n: told(kind="turn", dx=9, dy=1, moving=True), 30),
        "hold_ms": 150,
    }
    found["slider_to_picture"] = {
        **milliseconds(lambda n: told(kind="cut", share=n / 30, axis="y", above=False), 30),
        "hold_ms": 250,
    }
    view.cut_away(0.0, "y")
    found["pick"] = milliseconds(lambda n: told(kind="pick", x=0.4 + 0.005 * n, y=0.5), 20)
    if not view.said.startswith("At "):
        raise SystemExit(f"the picks missed the part: {view.said}")
    name = view.tools["materials"][-1][0]
    found["ghost"] = milliseconds(lambda n: view.see(name, "ghost" if n % 2 == 0 else "shown"), 10)
    found["png_2x"] = milliseconds(lambda n: view.png(), 3)

    def both(n):
        told(kind="turn", dx=5, dy=0, moving=True)
        told(kind="cut", share=0.1 + 0.8 * (n % 10) / 10, axis="xyz"[n % 3], above=n % 2 == 0)

    for n in range(50):
        both(n)
    memory = []
    for n in range(500):
        both(n)
        if n % 100 == 99:
            gc.collect()
            memory.append(round(resident_mb(), 1))
    found["memory_over_500_redraws_MB"] = memory
    if view.status:
        raise SystemExit(view.status)
    return found


SECTIONS = {"space": space}


def main():
    """Every section on one open workbench."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--only", nargs="*", choices=list(SECTIONS), default=list(SECTIONS))
    parser.add_argument("--design", type=Path, default=ROOT / "notebooks" / "grip" / "grip.toml")
    asked = parser.parse_args()
    with tempfile.TemporaryDirectory() as folder:
        copied = Path(folder) / "design"
        shutil.copytree(asked.design.parent, copied)
        bench = open_workbench(copied / asked.design.name)
        bench.jobs.settle(600)
        found = {name: SECTIONS[name](bench) for name in asked.only}
        bench.close()
    print(json.dumps(found, indent=1))


if __name__ == "__main__":
    main()

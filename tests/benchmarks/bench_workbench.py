"""How fast the workbench answers, and that it does not grow: JSON.

Run: python tests/benchmarks/bench_workbench.py [--only SECTION ...] [--design FILE]

Without a design it takes ``notebooks/grip/grip.toml``. Times are from the message that the browser
sends to the picture that goes back, in one process; what the browser adds is not in them.
"""

import argparse
import gc
import json
import shutil
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

from voxelmat.io.design import load_design
from voxelmat.io.mesh import write_stl
from voxelmat.shape.solid import box
from voxelmat.workbench.app import open_workbench
from voxelmat.workflow.live import LIVE_VOXELS, live_answer
from voxelmat.workflow.shapecache import ShapeCache

ROOT = Path(__file__).resolve().parents[2]
sys.path.insert(0, str(ROOT / "tests"))
import small_design  # noqa: E402


def resident_mb():
    """Resident memory of this process now, MB (Linux)."""
    for line in Path("/proc/self/status").read_text().splitlines():
        if line.startswith("VmRSS"):
            return int(line.split()[1]) / 1024
    raise SystemExit("no VmRSS in /proc/self/status")


def milliseconds(action, times):
    """Median and 95 % of the time that ``action(n)`` takes, and of its processor time, ms.

    The processor's, over all threads, says more than the clock where the machine is shared.
    """
    taken, cpu = [], []
    for n in range(times):
        start, cpu_start = time.perf_counter(), time.process_time()
        action(n)
        taken.append(1e3 * (time.perf_counter() - start))
        cpu.append(1e3 * (time.process_time() - cpu_start))
    low, high = np.percentile(taken, [50, 95])
    return {
        "median_ms": round(float(low), 1),
        "p95_ms": round(float(high), 1),
        "cpu_median_ms": round(float(np.median(cpu)), 1),
    }


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


def slices(bench):
    """Another slice, from its number to its picture."""
    view = bench.stage.slices
    count = view.count

    def turn(n):
        view.index = (3 * n + 1) % count

    found = {"slice": {**milliseconds(turn, 40), "hold_ms": 100}, "count": count}
    if view.status:
        raise SystemExit(view.status)
    return found


def brush(bench):
    """A stroke beside the core, from the message of the browser to the rule and the new slice.

    The browser draws it at once, before any message; tests/browser holds that at 50 ms.
    """
    view = bench.stage.slices
    bench.paint.hold(on=True)
    middle = view.count // 2

    def stroke(n):
        u = 0.35 + 0.002 * n
        points = [[u, 0.15], [u + 0.1, 0.15]]
        view._told(
            None, {"kind": "stroke", "axis": view.axis, "index": middle, "points": points}, []
        )
        if bench.message_is_bad:
            raise SystemExit(bench.message)

    rules = len(bench.draft.data.get("layout", []))
    found = {"round_trip": milliseconds(stroke, 15)}
    if len(bench.draft.data["layout"]) != rules + 15:
        raise SystemExit("a stroke was lost")
    for _ in range(15):
        bench.undo()
    bench.jobs.settle(600)
    return found


def _block(folder, n):
    """The small design of the tests, grown to n voxels along each axis. Invented."""
    text = small_design.write_small_design(folder).read_text(encoding="utf-8")
    write_stl(box((float(n), float(n), n / 4), name="plate"), folder / "plate.stl")
    pad = box((float(n), float(n), 3 * n / 4), (0.0, 0.0, n / 4), name="pad")
    write_stl(pad, folder / "pad.stl")
    return text


def live(bench):
    """Quick answers after an edit of a load (stiffness as before) and of a blend (all anew)."""
    found = {"hold_ms_at_48": 1000}
    for n in (32, 48, 64):
        with tempfile.TemporaryDirectory() as name:
            text, path = _block(Path(name), n), Path(name) / "design.toml"
            shapes, last = ShapeCache(), None

            def after(old, new, path=path, text=text, shapes=shapes, last=last, n=n):
                path.write_text(text.replace(old, new), encoding="utf-8")
                return live_answer(load_design(path), n**3, shapes=shapes, most=n**3, before=last)

            last = after("", "")

            def load(k, after=after, last=last):
                after("pressure_MPa = 0.02", f"pressure_MPa = {0.021 + 0.001 * k:.3f}", last=last)

            def blend(k, after=after, last=last):
                new = f"measured-soft = {0.7 - 0.02 * k:.2f}"
                after("measured-soft = 0.75", new, last=last)

            found[f"{n}^3"] = {
                "grid": list(last.built.part.grid.shape),
                "load_edited": milliseconds(load, 5),
                "blend_edited": milliseconds(blend, 5),
            }
    design, voxels = bench.design, bench.part.grid.n_voxels
    live_answer(design, voxels, shapes=bench.shapes)
    found[f"{design.name}, all {len(design.cases)} load cases anew"] = {
        **milliseconds(lambda k: live_answer(design, voxels, shapes=bench.shapes), 3),
        "of_voxels": LIVE_VOXELS,
    }
    return found


def edits(bench):
    """Memory over 500 edits, each with its picture and its quick answer, a third taken back."""
    memory = []
    with tempfile.TemporaryDirectory() as name:
        small = open_workbench(small_design.write_small_design(Path(name)))
        small.jobs.settle(600)

        def edit(n):
            if n % 3 == 2:
                small.undo()
            elif n % 3 == 1:
                small.loads.set_pressure(case="press", load=0, pressure_MPa=0.02 + 1e-4 * n)
            else:
                at = [2.0 + n % 8, 4.0, 4.0]
                small.paint.stroke(path_mm=[at], blend={"measured-hard": 1}, radius_mm=1.0)
                if len(small.draft.data["layout"]) > 4:
                    small.remove("layout[0]")
            small.jobs.settle(60)
            if small.message_is_bad:
                raise SystemExit(small.message)

        for n in range(60):
            edit(n)
        for n in range(500):
            edit(n)
            if n % 100 == 99:
                gc.collect()
                memory.append(round(resident_mb(), 1))
        small.close()
    slope = float(np.polyfit(range(len(memory)), memory, 1)[0])
    return {"memory_MB": memory, "slope_MB_per_100_edits": round(slope, 2)}


SECTIONS = {"space": space, "slices": slices, "brush": brush, "live": live, "edits": edits}


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

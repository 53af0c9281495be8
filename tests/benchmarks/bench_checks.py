"""Packed and 3-D checks against the slicing time in one run; prints one line of JSON.

Run: python tests/benchmarks/bench_checks.py [width_mm]

Gates: packed checks at most the CPU time of writing the stack, 3-D checks at most five times it.
"""

import json
import sys
import tempfile
import time
from pathlib import Path

from bench_slicing import graded_dome

from voxelmat.printing.checks3d import design_findings, three_d_findings
from voxelmat.printing.drains import drain_findings
from voxelmat.printing.jumps import jump_findings
from voxelmat.printing.measure import image_sizes
from voxelmat.printing.profile import load_profile
from voxelmat.printing.scan import scan
from voxelmat.printing.stack import write_stack
from voxelmat.printing.thickness import image_triple, thickness_findings

GATES = {"packed_over_write": 1.0, "three_d_over_write": 5.0}


def timed(call):
    """CPU seconds of all threads, and the result."""
    start = time.process_time()
    result = call()
    return time.process_time() - start, result


def run(width, folder):
    """Seconds of writing and of each check on a graded dome of `width` mm."""
    part = graded_dome(width)
    profile = load_profile("invented-standard")
    seconds = {}
    seconds["write"], stack = timed(lambda: write_stack(part, profile, folder / "s"))
    pitch = image_triple(stack, stack.pitch_mm)
    least = profile.minimum
    wall, gap = (
        image_sizes(image_triple(stack, size), pitch) for size in (least.wall_xyz, least.gap_xyz)
    )
    seconds["packed"], facts = timed(lambda: scan(stack, wall, gap))
    found = []
    for name, call in (
        ("thickness", lambda: thickness_findings(stack, profile)),
        ("drains", lambda: drain_findings(stack, profile, sealed=facts.hollows)),
        ("jumps", lambda: jump_findings(stack)),
        ("zones", lambda: design_findings(part, stack.raster, profile)),
    ):
        seconds[name], findings = timed(call)
        found += findings
    return stack, seconds, found


def main(width=60.0):
    with tempfile.TemporaryDirectory() as folder:
        warm, _, _ = run(6.0, Path(folder))  # compile
        three_d_findings(warm)
    with tempfile.TemporaryDirectory() as folder:
        stack, seconds, found = run(width, Path(folder))
        layers, rows, columns = stack.raster.image_shape
    three_d = sum(seconds[k] for k in ("thickness", "drains", "jumps", "zones"))
    ratios = {
        "packed_over_write": round(seconds["packed"] / seconds["write"], 2),
        "three_d_over_write": round(three_d / seconds["write"], 2),
    }
    print(
        json.dumps(
            {
                "benchmark": "checks against slicing",
                "sites": layers * rows * columns,
                "channels": len(stack.channels),
                "cpu_s": {k: round(v, 2) for k, v in seconds.items()},
                **ratios,
                "gates": GATES,
                "held": all(ratios[k] <= v for k, v in GATES.items()),
                "findings": sorted({f.code for f in found}),
            }
        )
    )


if __name__ == "__main__":
    main(*map(float, sys.argv[1:]))

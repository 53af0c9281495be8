"""Voxelising a ten-million-voxel grip against a NumPy twin in one run; prints one line of JSON.

Run: python tests/benchmarks/bench_voxelise.py [millions_of_voxels]
"""

import json
import sys
import time
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))

from mesh_twins import distance_to_triangles, solid_angle_winding

from voxelmat.shape.solid import revolve
from voxelmat.shape.voxelise import grid_for, voxelise

SAMPLE = 400  # voxels that the twin does; it would take hours for all


def grip():
    """A wavy, tapered handle (invented)."""
    z = np.linspace(0, 120, 120)
    return revolve(np.column_stack([15 + 0.04 * z + 1.5 * np.sin(z / 6), z]), 160, name="grip")


def clocked(call):
    wall, cpu = time.perf_counter(), time.process_time()
    result = call()
    return result, time.perf_counter() - wall, time.process_time() - cpu


def main(millions=10.0):
    mesh = grip()
    size = mesh.size
    spacing = float((size.prod() / (millions * 1e6)) ** (1 / 3))
    voxelise(mesh, grid_for(mesh, 10.0))  # compile
    grid = grid_for(mesh, spacing)
    shape, wall, cpu = clocked(lambda: voxelise(mesh, grid))
    rng = np.random.default_rng(1)
    near = np.argwhere(np.abs(shape.distance) < 127)
    chosen = near[rng.choice(len(near), SAMPLE, replace=False)]
    points = np.array(grid.origin) + (chosen + 0.5) * spacing
    (exact, turns), _, twin_cpu = clocked(
        lambda: (
            distance_to_triangles(mesh.triangles, points),
            solid_angle_winding(mesh.triangles, points),
        )
    )
    signed = np.where(turns > 0.5, -1, 1) * exact * 16 / spacing
    worst = float(np.abs(shape.distance[tuple(chosen.T)] - signed).max())
    result = {
        "benchmark": "voxelise",
        "faces": len(mesh.faces),
        "voxels": grid.n_voxels,
        "band_voxels": len(near),
        "wall_s": round(wall, 2),
        "cpu_s": round(cpu, 2),
        "us_a_band_voxel": round(cpu / len(near) * 1e6, 3),
        "twin_us_a_voxel": round(twin_cpu / SAMPLE * 1e6, 1),
        "faster_than_twin": round(twin_cpu / SAMPLE / (cpu / len(near))),
        "worst_distance_error_sixteenths": round(worst, 3),
        "volume_error": float(f"{shape.volume / mesh.volume - 1:.1e}"),
    }
    print(json.dumps(result))
    return 0 if worst <= 0.5 + 1e-6 else 1


if __name__ == "__main__":
    sys.exit(main(*(float(a) for a in sys.argv[1:])))

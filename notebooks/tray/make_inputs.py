"""Write the foot's input files: a soft puck and the rigid disc in it. All of it is invented.

Run ``python make_inputs.py`` in this folder. The files come out the same byte for byte, and they
are kept beside this script, so that nobody has to run it.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import trimesh

HERE = Path(__file__).resolve().parent

SECTORS = 48  # corners round the rim
PUCK_RADIUS, PUCK_HEIGHT = 9.0, 8.0  # mm
DISC_RADIUS, DISC_HEIGHT = 5.0, 3.0  # mm; the disc is let into the puck from below


def cylinder(radius: float, height: float) -> trimesh.Trimesh:
    """A closed cylinder that stands on z = 0, mm."""
    angle = 2.0 * np.pi * np.arange(SECTORS) / SECTORS
    rim = np.column_stack([radius * np.cos(angle), radius * np.sin(angle), np.zeros(SECTORS)])
    points = np.concatenate([rim, rim + (0.0, 0.0, height), [(0, 0, 0), (0, 0, height)]])
    a = np.arange(SECTORS)
    b = (a + 1) % SECTORS
    low, high = np.full(SECTORS, 2 * SECTORS), np.full(SECTORS, 2 * SECTORS + 1)
    faces = np.concatenate(
        [
            np.column_stack([a, b, SECTORS + b]),
            np.column_stack([a, SECTORS + b, SECTORS + a]),
            np.column_stack([low, b, a]),
            np.column_stack([high, SECTORS + a, SECTORS + b]),
        ]
    )
    mesh = trimesh.Trimesh(points, faces, process=False)
    if not (mesh.is_watertight and mesh.is_winding_consistent and mesh.volume > 0):
        raise SystemExit("The mesh did not close: the corners were given in a wrong order.")
    return mesh


def main() -> None:
    """Write the two files beside this script."""
    for name, radius, height in (
        ("puck", PUCK_RADIUS, PUCK_HEIGHT),
        ("disc", DISC_RADIUS, DISC_HEIGHT),
    ):
        mesh = cylinder(radius, height)
        (HERE / f"{name}.stl").write_bytes(mesh.export(file_type="stl"))


if __name__ == "__main__":
    main()

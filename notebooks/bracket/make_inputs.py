"""Write the bracket's input file: one closed mesh of an L. All of it is invented.

Run ``python make_inputs.py`` in this folder. The file comes out the same byte for byte, and it is
kept beside this script, so that nobody has to run it.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import trimesh

HERE = Path(__file__).resolve().parent

ARM, LEG = 48.0, 48.0  # mm, along x and up z, outside
THICK, WIDTH = 16.0, 16.0  # mm, of both arms, and across y


def ell() -> trimesh.Trimesh:
    """The bracket: an L in the x-z plane, drawn out along y."""
    # The inner corner comes first: from it every other corner is in sight, so a fan closes the L.
    outline = np.array(
        [(THICK, THICK), (THICK, LEG), (0.0, LEG), (0.0, 0.0), (ARM, 0.0), (ARM, THICK)]
    )
    count = len(outline)
    near = np.column_stack([outline[:, 0], np.zeros(count), outline[:, 1]])
    points = np.concatenate([near, near + (0.0, WIDTH, 0.0)])
    fan = np.array([(0, i, i + 1) for i in range(1, count - 1)])
    sides = [
        face
        for a in range(count)
        for b in [(a + 1) % count]
        for face in ((a, count + a, b), (b, count + a, count + b))
    ]
    faces = np.concatenate([fan, fan[:, ::-1] + count, sides])
    mesh = trimesh.Trimesh(points, faces, process=False)
    if mesh.volume < 0:
        mesh.invert()
    if not (mesh.is_watertight and mesh.is_winding_consistent):
        raise SystemExit("The mesh did not close: the corners were given in a wrong order.")
    return mesh


def main() -> None:
    """Write the file beside this script."""
    (HERE / "bracket.stl").write_bytes(ell().export(file_type="stl"))


if __name__ == "__main__":
    main()

"""Write the demo's input files: three closed meshes and a palm pressure map. All of it is invented.

Run ``python make_inputs.py`` in this folder. The files come out the same byte for byte, and they
are kept beside this script, so that nobody has to run it.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import trimesh

HERE = Path(__file__).resolve().parent

LENGTH = 112.0  # mm, along x: the shaft enters at x = 0, the free end is at x = 112
SECTORS = 64  # corners round each ring; neighbours share them, so that no gap opens
SHAFT_RADIUS, SHAFT_END = 6.0, 92.0
CORE_RADIUS, KEY_RADIUS = 9.5, 11.0  # the key is a ring that keeps the pad from creeping along
FLANGE_RADIUS, PAD_START, PAD_END = 14.0, 4.0, 106.0
KEY = (50.0, 51.5, 58.5, 60.0)

CELL = 4.0  # mm, edge of a cell of the pressure mat
ROWS, COLUMNS = 9, 26
FIRST_CELL = (6.0, 16.0)  # mm, x and y of the centre of row 0, column 0
PALM_FORCE = 60.0  # N, the resultant that the invented print is scaled to


def ring(x: float, half_y: float, half_z: float) -> np.ndarray:
    """Corners of an ellipse across the x axis, mm, shape (SECTORS, 3)."""
    angle = 2.0 * np.pi * np.arange(SECTORS) / SECTORS
    return np.column_stack([np.full(SECTORS, x), half_y * np.cos(angle), half_z * np.sin(angle)])


def closed_by_rings(rings: list[tuple[float, float, float]], *, hollow: bool) -> trimesh.Trimesh:
    """A closed mesh through rings (x, half_y, half_z), walked from the low end outside first.

    A hollow body walks back on its inside, and its last ring joins its first one; else the two
    ends get a centre point and a fan.
    """
    points = [ring(*r) for r in rings]
    count = len(rings)
    faces = []
    around = np.arange(SECTORS)
    after = (around + 1) % SECTORS
    for a in range(count if hollow else count - 1):
        low, high = a * SECTORS, (a + 1) % count * SECTORS
        faces.append(np.column_stack([low + around, high + around, high + after]))
        faces.append(np.column_stack([low + around, high + after, low + after]))
    if not hollow:
        first, last = count * SECTORS, count * SECTORS + 1
        points.append(np.array([[rings[0][0], 0.0, 0.0], [rings[-1][0], 0.0, 0.0]]))
        far = (count - 1) * SECTORS
        faces.append(np.column_stack([np.full(SECTORS, first), around, after]))
        faces.append(np.column_stack([np.full(SECTORS, last), far + after, far + around]))
    mesh = trimesh.Trimesh(np.concatenate(points), np.concatenate(faces), process=False)
    if mesh.volume < 0:
        mesh.invert()
    if not (mesh.is_watertight and mesh.is_winding_consistent):
        raise SystemExit("The mesh did not close: the rings were given in a wrong order.")
    return mesh


def round_rings(profile: list[tuple[float, float]]) -> list[tuple[float, float, float]]:
    """Round rings through (x, radius)."""
    return [(x, r, r) for x, r in profile]


def core_profile() -> list[tuple[float, float]]:
    """Outside of the core between its flanges, which is the inside of the pad: (x, radius)."""
    return [
        (PAD_START, CORE_RADIUS),
        (KEY[0], CORE_RADIUS),
        (KEY[1], KEY_RADIUS),
        (KEY[2], KEY_RADIUS),
        (KEY[3], CORE_RADIUS),
        (PAD_END, CORE_RADIUS),
    ]


def shaft() -> trimesh.Trimesh:
    """The bought-in steel shaft end, a plain rod."""
    ends = [(0.0, SHAFT_RADIUS), (SHAFT_END, SHAFT_RADIUS)]
    return closed_by_rings(round_rings(ends), hollow=False)


def core() -> trimesh.Trimesh:
    """The rigid core: a tube with a blind bore, a flange at each end and a key ring."""
    outside = [(0.0, FLANGE_RADIUS), (PAD_START, FLANGE_RADIUS), *core_profile()]
    outside += [(PAD_END, FLANGE_RADIUS), (LENGTH - 1.0, FLANGE_RADIUS)]
    outside += [(LENGTH, FLANGE_RADIUS - 1.0)]
    inside = [(0.0, SHAFT_RADIUS), (SHAFT_END, SHAFT_RADIUS)]
    walk = round_rings([*reversed(inside), *outside])
    return closed_by_rings(walk, hollow=False)


def pad_half_axes(x: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Half width along y and half height along z of the pad, mm.

    A waist for the thumb at a quarter of the length, a belly for the palm at five eighths.
    """
    t = (x - PAD_START) / (PAD_END - PAD_START)
    belly = np.exp(-(((t - 0.62) / 0.24) ** 2))
    ends = 1.0 - np.exp(-t / 0.03) - np.exp(-(1.0 - t) / 0.03)
    half_y = FLANGE_RADIUS + 1.2 * ends + 2.6 * belly * ends
    half_z = FLANGE_RADIUS + 0.4 * ends + 1.5 * belly * ends
    return half_y, half_z


def pad() -> trimesh.Trimesh:
    """The soft pad round the core, oval, thickest under the palm."""
    x = np.linspace(PAD_START, PAD_END, 31)
    half_y, half_z = pad_half_axes(x)
    outside = list(zip(x.tolist(), half_y.tolist(), half_z.tolist(), strict=True))
    walk = outside + round_rings(list(reversed(core_profile())))
    return closed_by_rings(walk, hollow=True)


def palm_pressure() -> np.ndarray:
    """An invented print of a right palm, kPa, shape (ROWS, COLUMNS).

    The ball of the thumb bears most, the heel of the hand less, the finger roots least; it is
    unlike itself mirrored along x and along y, so that a flipped map shows.
    """
    column, row = np.meshgrid(np.arange(COLUMNS), np.arange(ROWS))
    x = FIRST_CELL[0] + CELL * column
    y = FIRST_CELL[1] - CELL * row
    print_ = 62.0 * np.exp(-(((x - 70.0) / 15.0) ** 2) - ((y - 2.5) / 7.5) ** 2)
    print_ += 34.0 * np.exp(-(((x - 40.0) / 13.0) ** 2) - ((y + 3.5) / 6.5) ** 2)
    print_ += 16.0 * np.exp(-(((x - 92.0) / 7.0) ** 2) - ((y + 1.0) / 6.0) ** 2)
    print_[print_ < 2.0] = 0.0  # what a mat does not feel
    newton_per_kpa = 1e-3 * CELL * CELL
    return np.round(print_ * PALM_FORCE / (print_.sum() * newton_per_kpa), 1)


def main() -> None:
    """Write the four files beside this script."""
    for name, mesh in (("shaft", shaft()), ("core", core()), ("pad", pad())):
        (HERE / f"{name}.stl").write_bytes(mesh.export(file_type="stl"))
    rows = [",".join(f"{v:.1f}" for v in row) for row in palm_pressure()]
    head = [
        "# Palm pressure on the grip, kPa. INVENTED for the demo: no person was measured.",
        "# Cells of 4 mm x 4 mm. Columns run along x+ from x = 6 mm, rows along y- from y = 16 mm.",
        "# The mat lies on top (z+). The resultant is about 60 N.",
    ]
    (HERE / "palm.csv").write_text("\n".join(head + rows) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()

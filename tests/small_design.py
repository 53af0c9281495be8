"""A small design on disk, made up: a soft pad on a rigid plate, pressed from above."""

from __future__ import annotations

from voxelmat.io.mesh import write_stl
from voxelmat.shape.solid import box

# Invented: a soft pad on a rigid plate.
DESIGN = """
format = 1
name = "pad on a plate"
invented = true
seed = 3

[grid]
spacing_mm = [1.0, 1.0, 1.0]

[materials]
files = ["measured-soft.toml", "measured-hard.toml", "curve.toml"]
law = "calibrated"

[[body]]
name = "plate"
mesh = "plate.stl"
unit = "mm"
resin = "measured-hard"

[[body]]
name = "pad"
mesh = "pad.stl"
unit = "mm"
blend = { measured-soft = 0.75, measured-hard = 0.25 }

[[region]]
name = "bottom"
kind = "face"
side = "z-"

[[region]]
name = "top"
kind = "face"
side = "z+"

[[load_case]]
name = "press"
duration_s = 1.0
temperature_degC = 23.0
cycles = 1

[[load_case.support]]
region = "bottom"
fixed = true

[[load_case.load]]
kind = "pressure"
region = "top"
pressure_MPa = 0.02

[[requirement]]
name = "gives way"
measure = "displacement"
load_case = "press"
region = "top"
at_least_mm = 0.0001

[print]
profile = "invented-coarse"
"""

MATERIAL = """
format = 1
name = "{name}"
kind = "{kind}"
colour = "{colour}"

[E_MPa]
value = {E}
low = {E}
high = {E}
temperature_degC = 23.0
source = "made up for this test"

[nu]
value = {nu}
low = {nu}
high = {nu}
temperature_degC = 23.0
source = "made up for this test"

[density_g_cm3]
value = 1.1
low = 1.1
high = 1.1
temperature_degC = 23.0
source = "made up for this test"

[conditions]
temperature_min_degC = 10.0
temperature_max_degC = 40.0
max_duration_s = 600.0
max_cycles = 1000
"""

CURVE = """
format = 1
first = "measured-soft"
second = "measured-hard"
source = "made up for this test"
temperature_degC = 23.0
rate_per_s = 0.33
fraction = [0.0, 0.25, 0.5, 0.75, 1.0]
E_MPa = [1.0, 7.0, 45.0, 300.0, 2000.0]
E_low_MPa = [1.0, 6.5, 43.0, 290.0, 2000.0]
E_high_MPa = [1.0, 7.5, 47.0, 310.0, 2000.0]
"""


def write_small_design(folder):
    """The design's file with everything that it names, in `folder`."""
    write_stl(box((12.0, 8.0, 2.0), name="plate"), folder / "plate.stl")
    write_stl(box((12.0, 8.0, 4.0), (0.0, 0.0, 2.0), name="pad"), folder / "pad.stl")
    whole = (folder / "pad.stl").read_bytes()
    (folder / "cut.stl").write_bytes(whole[:-30])
    faces = int.from_bytes(whole[80:84], "little") - 1
    (folder / "open.stl").write_bytes(whole[:80] + faces.to_bytes(4, "little") + whole[84:-50])
    for name, kind, modulus, nu, colour in (
        ("measured-soft", "elastomer", 1.0, 0.45, "#56B4E9"),
        ("measured-hard", "rigid", 2000.0, 0.35, "#E69F00"),
    ):
        text = MATERIAL.format(name=name, kind=kind, E=modulus, nu=nu, colour=colour)
        (folder / f"{name}.toml").write_text(text)
    (folder / "curve.toml").write_text(CURVE)
    path = folder / "design.toml"
    path.write_text(DESIGN)
    return path

"""Compile everything ahead: the solver's kernels, then a tiny whole job from meshes to a stack."""

from __future__ import annotations

import dataclasses
import tempfile
from collections.abc import Callable
from pathlib import Path

import numpy as np

from voxelmat.fea.warm import Warmed, compile_groups, solver_groups
from voxelmat.io.mesh import write_stl
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.scan import FirstSeen
from voxelmat.shape.inside import contains
from voxelmat.shape.solid import box, cylinder
from voxelmat.topopt.optimise import optimise
from voxelmat.workflow.build import Built, build
from voxelmat.workflow.designing import design_spec
from voxelmat.workflow.pipeline import run
from voxelmat.workflow.warm_printing import rare_prints

__all__ = ["warm", "warm_lines"]

# Invented: a soft pad on a rigid plate round a bought-in pin.
_DESIGN = """
format = 1
name = "warm-up"
invented = true

[grid]
spacing_mm = [1.0, 1.0, 1.0]

[[body]]
name = "pin"
mesh = "pin.stl"
unit = "mm"
bought_in = { name = "pin-steel", E_MPa = 206000, nu = 0.29, density_g_cm3 = 7.85, \
strength_MPa = 400 }
clearance_mm = 0.1
priority = 2

[[body]]
name = "plate"
mesh = "plate.stl"
unit = "mm"
resin = "rigid-general"
priority = 1

[[body]]
name = "pad"
mesh = "pad.stl"
unit = "mm"
blend = { elastomer-a27 = 0.75, rigid-general = 0.25 }
priority = 0

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
pressure_MPa = 0.001

[optimise]
resins = ["elastomer-a27", "rigid-general"]
objective = "compliance"
design_in = ["pad"]
void = false
filter_radius_mm = 2.0
iterations = 2
levels = 8

[[optimise.limit]]
kind = "resin"
resin = "rigid-general"
at_most_fraction = 0.4

[print]
profile = "invented-coarse"
"""


class _TinyJob:
    """One design in a folder of its own, stage by stage."""

    def __init__(self, folder: Path) -> None:
        self._folder = folder
        self._built: Built | None = None

    def shape(self) -> None:
        """Voxelise meshes that overlap and leave a gap."""
        folder = self._folder
        write_stl(box((12.0, 8.0, 3.0), name="plate"), folder / "plate.stl")
        write_stl(box((12.0, 8.0, 4.0), (0.0, 0.0, 3.0), name="pad"), folder / "pad.stl")
        write_stl(cylinder(1.5, 1.0, 5.0, 12, name="pin").transformed(_ASIDE), folder / "pin.stl")
        path = folder / "warm-up.toml"
        path.write_text(_DESIGN, encoding="utf-8")
        self._built = build(path)
        contains(box((1.0, 1.0, 1.0)), np.full((4, 3), 0.5))

    def stages(self, *names: str) -> Callable[[], object]:
        """A job that runs some stages of the pipeline."""

        def job() -> object:
            if self._built is None:
                self.shape()
            if self._built is None:
                return None
            return run(self._built, self._folder / "out", stages=names)

        return job

    def other_methods(self) -> None:
        """The optimisers that the design's own run does not take, with three resins and voids."""
        if self._built is None:
            self.shape()
        if self._built is None:
            return
        built = self._built
        third = built.library["rigid-tough"]
        part = built.part.replace(resins=(*built.part.resins, third))
        spec = design_spec(built)
        more = (*spec.resins, third.name)
        asked = (
            dataclasses.replace(spec, method="mma", iterations=3),
            dataclasses.replace(spec, method="gcmma", iterations=3),
            dataclasses.replace(spec, method="mirror", resins=more, void=True, iterations=3),
        )
        for one in asked:
            optimise(part, built.load_cases, one)


def _first_seen() -> None:
    """What only a stack with faults calls."""
    FirstSeen().note(0, np.ones((2, 1), dtype=np.uint64), 2)


# Moves the pin into the block.
_ASIDE = [[1.0, 0.0, 0.0, 6.0], [0.0, 1.0, 0.0, 4.0], [0.0, 0.0, 1.0, 0.0], [0.0, 0.0, 0.0, 1.0]]


def warm(monitor: Monitor = SILENT) -> list[Warmed]:
    """Compile all kernels of a run ahead, so that the first run need not.

    Parameters
    ----------
    monitor : Monitor
        Told "compiling, once" with each group.

    Returns
    -------
    list of Warmed
        One a group, with the seconds of each kernel; empty where all was compiled before.

    Raises
    ------
    ResourceError
        Where no temporary folder can be written.
    """
    with tempfile.TemporaryDirectory(prefix="voxelmat-") as name:
        tiny = _TinyJob(Path(name))
        groups: list[tuple[str, Callable[[], object]]] = [
            *solver_groups(),
            ("shapes and voxels", tiny.shape),
            ("optimiser", tiny.stages("optimise")),
            ("other optimisers", tiny.other_methods),
            ("slicing", tiny.stages("stack")),
            ("reading back", tiny.stages("stack", "as printed")),
            ("rare prints", lambda: rare_prints(Path(name) / "rare")),
            ("faults of a stack", _first_seen),
        ]
        return compile_groups(groups, monitor)


def warm_lines(done: list[Warmed]) -> list[str]:
    """What `warm` did, as lines for a terminal: seconds a group and a kernel."""
    lines = []
    for group in done:
        lines.append(f"{group.group}: {group.compiling:.1f} s compiling, {group.seconds:.1f} s all")
        slow_first = sorted(group.kernels.items(), key=lambda item: -item[1])
        lines += [f"    {kernel}: {seconds:.1f} s" for kernel, seconds in slow_first]
    total = sum(group.compiling for group in done)
    lines.append(
        f"All kernels are ready; {total:.1f} s went into compiling."
        if total
        else "All kernels were ready before."
    )
    return lines

"""The section that presses the part: an indenter anywhere, dragged in, and what it reads."""

from __future__ import annotations

from typing import Any

import numpy as np

from voxelmat.errors import InputError
from voxelmat.fea.contact import press
from voxelmat.model.contactresult import PressCurve
from voxelmat.model.indenter import (
    CylinderIndenter,
    FlatPunch,
    Indenter,
    SphereIndenter,
    direction,
)
from voxelmat.monitor import Monitor
from voxelmat.units import number, quantity
from voxelmat.workbench import controls as c
from voxelmat.workbench.jobs import Job
from voxelmat.workbench.plots import lines_png
from voxelmat.workbench.section import Section, number_from
from voxelmat.workflow.build import build
from voxelmat.workflow.live import LIVE_VOXELS, coarse_design

__all__ = ["PressSection"]

KINDS = ("ball", "round flat end", "rectangular plate", "roller")
PUSHES = ("z-", "z+", "y-", "y+", "x-", "x+")
_SHARES = (0.25, 0.5, 0.75, 1.0)  # of the depth at which the curve is computed
_START = {
    "kind": "ball",
    "radius_mm": 5.0,
    "size_mm": [10.0, 10.0],
    "push": "z-",
    "depth_mm": 0.1,
    "fine": False,
}


class PressSection(Section):
    """A rigid indenter pressed on the part, held as in the load case that is chosen.

    Attributes
    ----------
    curve : PressCurve or None
        What the last press found.
    """

    name = "press"
    title = "Press"

    def __init__(self, bench: Any) -> None:
        super().__init__(bench)
        self.curve: PressCurve | None = None
        self._of = ""
        self._asked: dict[str, Any] = {}
        self._coarsening = 1.0
        self._plot = b""

    # ------------------------------------------------------------------ the indenter
    @property
    def asked(self) -> dict[str, Any]:
        """Kind, sizes, place, way and depth of the indenter."""
        return {**_START, **self.bench.draft.view.get("press", {})}

    def shape(self, kind: str, radius_mm: float = 5.0, size_mm: list[float] | None = None) -> None:
        """Choose the indenter.

        Parameters
        ----------
        kind : str
            "ball", "round flat end", "rectangular plate" or "roller".
        radius_mm : float
            Of all but the plate.
        size_mm : list of float
            Edges of the plate along the two axes across the push.
        """
        if kind not in KINDS:
            raise InputError(f"An indenter is one of {', '.join(KINDS)}; got {kind!r}.")
        new = {**self.asked, "kind": kind, "radius_mm": radius_mm}
        if size_mm is not None:
            new["size_mm"] = list(size_mm)
        self._made(new, (0.0, 0.0, 0.0))  # refuses sizes that cannot be
        self._keep(new)

    def place(self, at_mm: list[float], push: str = "") -> None:
        """Say where it presses, and which way: "z-" presses down from above."""
        way = push or self.asked["push"]
        if way not in PUSHES:
            raise InputError(f"The push is one of {', '.join(PUSHES)}; got {way!r}.")
        self._keep({**self.asked, "at_mm": [round(float(v), 4) for v in at_mm], "push": way})

    def _keep(self, asked: dict[str, Any]) -> None:
        self.bench.draft.view["press"] = asked
        self.bench.draft.autosave()
        self.bench.tell("press")

    def _made(self, asked: dict[str, Any], start: tuple[float, float, float]) -> Indenter:
        push, kind = asked["push"], asked["kind"]
        radius = float(asked["radius_mm"])
        if kind == "ball":
            return SphereIndenter(name=kind, position=start, push=push, radius=radius)
        if kind == "round flat end":
            return FlatPunch(name=kind, position=start, push=push, radius=radius)
        if kind == "rectangular plate":
            u, v = (float(s) for s in asked["size_mm"])
            return FlatPunch(name=kind, position=start, push=push, size=(u, v))
        along = next(a for a in "xyz" if a != push[0])
        return CylinderIndenter(name=kind, position=start, push=push, radius=radius, along=along)

    # ------------------------------------------------------------------ pressing
    def press(self, depth_mm: float = 0.0, fine: bool | None = None) -> Job[PressCurve]:
        """Press it in, beside the screen; a newer press takes the place of one that runs.

        Parameters
        ----------
        depth_mm : float
            After first touch; that of the screen where left out.
        fine : bool
            On the design's own voxels; on about 48^3 where not.

        Returns
        -------
        Job
            ``bench.press.press(0.2).wait()`` gives the `PressCurve`.

        Raises
        ------
        InputError
            If no place is chosen, or the load case that is chosen holds the part nowhere.
        """
        asked = self.asked
        depth = float(depth_mm or asked["depth_mm"])
        fine = bool(asked["fine"] if fine is None else fine)
        if "at_mm" not in asked:
            raise InputError("Click the part where it is to be pressed, or call place(at_mm).")
        if not depth > 0:
            raise InputError(f"The depth must be above 0 mm; got {depth}.")
        self._keep({**asked, "depth_mm": depth, "fine": fine})
        design, case = self.bench.design, self.bench.loads.case

        def work(monitor: Monitor) -> PressCurve:
            built, factor = self.bench.build(monitor), 1.0
            if not fine:
                coarse, factor = coarse_design(design, built.part.grid.n_voxels, LIVE_VOXELS)
                if factor > 1:
                    built = build(coarse, monitor=monitor, shapes=self.bench.shapes)
            loads = next(k for k in built.load_cases if k.name == case)
            grid = built.part.grid
            size = float(np.linalg.norm(np.subtract(grid.upper, grid.origin)))
            x, y, z = np.asarray(asked["at_mm"]) - 2 * size * direction(asked["push"])
            indenter = self._made(asked, (float(x), float(y), float(z)))
            curve = press(
                built.part, loads.supports, indenter, [s * depth for s in _SHARES], monitor=monitor
            )
            self.curve, self._of, self._coarsening = curve, design.digest, factor
            self._asked = {**asked, "depth_mm": depth}
            self._plot = lines_png(
                {"": ([0.0, *curve.depth], [0.0, *curve.force])}, "depth, mm", "force, N"
            )
            self.bench.tell("press")
            return curve

        return self.bench.jobs.submit("pressing", work, key="press")

    # ------------------------------------------------------------------ the screen
    def controls(self) -> list[c.Control]:
        """The indenter, the depth, what it reads."""
        if self.bench.draft.empty:
            return [c.words("Choose a mesh under Shape first.", tone="hint")]
        if not self.bench.loads.cases:
            return [c.words("Add a load case under Loads: it says where the part is held.",
                            tone="hint")]  # fmt: skip
        asked = self.asked
        shown = [c.choice("kind", "Indenter", asked["kind"], KINDS)]
        if asked["kind"] == "rectangular plate":
            shown += [
                c.number_box("size:0", "Edge along the first axis", asked["size_mm"][0], "mm"),
                c.number_box("size:1", "Edge along the second", asked["size_mm"][1], "mm"),
            ]
        else:
            shown.append(c.number_box("radius", "Radius", asked["radius_mm"], "mm"))
        shown.append(c.choice("push", "Pushed along", asked["push"], PUSHES))
        if "at_mm" in asked:
            shown.append(c.vector_box("at", "At", asked["at_mm"], "mm"))
        else:
            shown.append(c.words("Click the part where it is to be pressed.", tone="hint"))
        if self.bench.picked is not None:
            shown.append(c.button("here", "Press at the clicked place"))
        top = max(2 * float(asked["depth_mm"]), 0.1)
        shown += [
            c.slider("depth", "Depth", asked["depth_mm"], 0.0, round(top, 4),
                     float(f"{top / 50:.1g}"), "mm"),
            c.toggle("fine", "On the design's own voxels (slower)", bool(asked["fine"])),
            c.group(c.button("press", "Press", main=True, disabled="at_mm" not in asked,
                             why="choose a place first")),
        ]  # fmt: skip
        return shown + self._read()

    def _read(self) -> list[c.Control]:
        if self.curve is None:
            return []
        last = self.curve.last
        place = ", ".join(number(v) for v in last.peak_pressure.place_mm)
        rows = [
            ["force", quantity(last.force, "N")],
            ["at a depth of", quantity(last.depth, "mm")],
            ["stiffness there", quantity(last.tangent, "N/mm")],
            ["force over depth", quantity(last.secant, "N/mm")],
            ["peak pressure", quantity(last.peak_pressure.value, "MPa")],
            ["at", f"{place} mm"],
            ["contact area", quantity(last.contact_area, "mm2")],
        ]
        stale = self.bench.design.digest != self._of or self.asked != {
            **self._asked, "fine": self.asked["fine"]
        }  # fmt: skip
        how = "on the design's own voxels"
        if self._coarsening > 1:
            how = f"on voxels {number(self._coarsening, 2)} times as long"
        shown = [
            {**c.table(["pressed", "value"], rows, caption=f"Linear, {how}"), "stale": stale},
            c.picture(self._plot, "Force against depth"),
        ]
        return [*shown, *(c.words(t, tone="warn") for t in last.cautions)]

    def act(self, name: str, value: Any) -> None:
        """One of the controls."""
        asked = self.asked
        head, _, tail = name.partition(":")
        if name == "kind":
            self.call("shape", kind=str(value), radius_mm=asked["radius_mm"])
        elif name == "radius":
            radius = number_from(value, "The radius", "mm")
            self.call("shape", kind=asked["kind"], radius_mm=radius)
        elif head == "size":
            size = list(asked["size_mm"])
            size[int(tail)] = number_from(value, "An edge", "mm")
            self.call("shape", kind=asked["kind"], size_mm=size)
        elif name == "push":
            self._keep({**asked, "push": str(value)})
            if "at_mm" in asked:
                self.call("place", at_mm=asked["at_mm"], push=str(value))
        elif name == "at":
            at = [number_from(v, "The place", "mm") for v in value]
            self.call("place", at_mm=at, push=asked["push"])
        elif name == "here" and self.bench.picked is not None:
            place = list(self.bench.picked["place_mm"])
            self.call("place", at_mm=place, push=asked["push"])
        elif name == "depth":
            depth = number_from(value, "The depth", "mm")
            if depth > 0 and "at_mm" in asked:
                self.call("press", depth_mm=depth)
        elif name == "fine":
            self._keep({**asked, "fine": bool(value)})
        elif name == "press":
            self.call("press", depth_mm=asked["depth_mm"])

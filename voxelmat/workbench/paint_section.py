"""The section that paints: strokes, fills and replacements, each one more rule of the layout."""

from __future__ import annotations

from typing import Any

from voxelmat.errors import InputError
from voxelmat.model.blend import Blend
from voxelmat.printing.job import one_part_job
from voxelmat.printing.profile import load_profile
from voxelmat.units import number
from voxelmat.workbench import controls as c
from voxelmat.workbench.section import Section, number_from
from voxelmat.workbench.shown import of_part
from voxelmat.workbench.showndroplets import of_droplets
from voxelmat.workflow.draft_keys import add_at
from voxelmat.workflow.strokes import thinned_path

__all__ = ["PaintSection"]

TOOLS = ("brush", "line", "fill", "fill in the slice", "replace")
BRUSHES = ("sphere", "disc", "box")
_DEFAULT_PROFILE = "invented-standard"
_START = {"on": False, "tool": "brush", "brush": "sphere", "radius_mm": 1.5, "to": "", "region": ""}


class PaintSection(Section):
    """Paint on the slices with the blend in hand (see Material)."""

    name = "paint"
    title = "Paint"

    def __init__(self, bench: Any) -> None:
        super().__init__(bench)
        self._start: list[float] | None = None
        self.droplets = False
        self._window: dict[str, float | None] = {"width": 10.0}

    # ------------------------------------------------------------------ the brush
    @property
    def asked(self) -> dict[str, Any]:
        """Tool, brush and its size."""
        return {**_START, **self.bench.draft.view.get("paint", {})}

    def hold(self, **settings: Any) -> None:
        """Set the tool in hand: ``on``, ``tool``, ``brush``, ``radius_mm``, ``to``, ``region``.

        Raises
        ------
        InputError
            For a tool or a brush that there is not, or a radius of 0 or less.
        """
        new = {**self.asked, **settings}
        if new["tool"] not in TOOLS or new["brush"] not in BRUSHES:
            raise InputError(
                f"Tools are {', '.join(TOOLS)}; brushes are {', '.join(BRUSHES)}; got "
                f"{new['tool']!r} and {new['brush']!r}."
            )
        if not 0 < float(new["radius_mm"]) < 1e4:
            raise InputError(f"The radius must be above 0 mm; got {new['radius_mm']}.")
        self.bench.draft.view["paint"] = new
        self.bench.draft.autosave()
        self._start = None
        self._tell_canvas()
        self.bench.tell("paint")

    def _sizes(self, brush: str, radius_mm: float, axis: str) -> dict[str, Any]:
        if brush == "sphere":
            return {"radius_mm": radius_mm}
        if brush == "box":
            return {"size_mm": [2 * radius_mm] * 3}
        depth = self.bench.draft.data["grid"]["spacing_mm"]["xyz".index(axis)]
        return {"radius_mm": radius_mm, "axis": axis, "depth_mm": depth}

    # ------------------------------------------------------------------ painting
    def stroke(
        self,
        path_mm: list[list[float]],
        brush: str = "sphere",
        radius_mm: float = 1.5,
        blend: dict[str, float] | None = None,
        to: dict[str, float] | None = None,
        axis: str = "z",
        region: str = "",
    ) -> None:
        """Paint along a path, as one more layout rule.

        Parameters
        ----------
        path_mm : list of points
            Where the middle of the brush goes; one point makes a dab.
        brush : str
            "sphere", "disc" (one voxel thick, across `axis`) or "box" (a cube).
        radius_mm : float
            Half the width of the brush.
        blend : dict
            Parts by volume; the blend in hand where left out.
        to : dict
            Blend at the end of the path, for a gradient along it.
        axis : str
        region : str
            Paint only there.
        """
        if brush not in BRUSHES:
            raise InputError(f"A brush is one of {', '.join(BRUSHES)}; got {brush!r}.")
        first = blend or dict(self.bench.mix.blend.fractions)
        edge = min(self.bench.draft.data["grid"]["spacing_mm"])
        rule: dict[str, Any] = {
            "kind": "stroke",
            "brush": brush,
            **self._sizes(brush, float(radius_mm), axis),
            "path_mm": thinned_path(path_mm, 0.25 * edge),
        }
        rule |= {"blend": first} if to is None else {"from": first, "to": to}
        self._add(rule, region, "stroke")

    def fill(
        self,
        at_mm: list[float],
        blend: dict[str, float] | None = None,
        axis: str = "",
        region: str = "",
    ) -> None:
        """Fill what hangs together with a point and is of one blend; with `axis`, in its slice."""
        rule: dict[str, Any] = {
            "kind": "fill",
            "at_mm": [round(float(v), 4) for v in at_mm],
            "blend": blend or dict(self.bench.mix.blend.fractions),
        }
        self._add(rule | ({"axis": axis} if axis else {}), region, "fill")

    def replace(
        self, old: dict[str, float], blend: dict[str, float] | None = None, region: str = ""
    ) -> None:
        """Put a blend wherever another one is."""
        new = blend or dict(self.bench.mix.blend.fractions)
        self._add({"kind": "replace", "old": old, "blend": new}, region, "replace")

    def _add(self, rule: dict[str, Any], region: str, label: str) -> None:
        if region:
            rule["region"] = region
        before = len(self.bench.draft.data.get("layout", []))
        self.bench.draft.change(label, lambda d: add_at(d, "layout", rule))
        try:
            self.bench.build()  # a rule that paints nothing is refused now, not at the next solve
        except InputError:
            if len(self.bench.draft.data.get("layout", [])) > before:
                self.bench.draft.drop_last()
            raise

    # ------------------------------------------------------------------ droplets
    def show_droplets(
        self, width_mm: float | None = None, centre_mm: list[float] | None = None
    ) -> None:
        """Show the slices as droplets, halftoned as they would be printed.

        Parameters
        ----------
        width_mm : float
            Of the window; the whole part where left out.
        centre_mm : list of float
            Middle of the window on the tray, mm.
        """
        printing = self.bench.design.printing
        name = printing.profile if printing is not None else _DEFAULT_PROFILE
        if name.endswith(".toml"):
            name = str(self.bench.design.file(name))
        more: dict[str, Any] = {}
        if printing is not None:
            more = {
                "orientation": printing.orientation,
                "position": printing.position_mm,
                "support": printing.support,
                "halftone": printing.halftone,
            }
        part = self.bench.part
        job = one_part_job(part, load_profile(name), seed=self.bench.design.seed, **more)
        centre = None if centre_mm is None else (float(centre_mm[0]), float(centre_mm[1]))
        self.droplets = True
        self._show(of_droplets(job, of_part(part), centre, width_mm))

    def show_voxels(self) -> None:
        """Show the slices as voxels of the design again."""
        self.droplets = False
        self._show(of_part(self.bench.part))

    def _show(self, shown: Any) -> None:
        stage = getattr(self.bench, "stage", None)
        if stage is not None:
            stage.show(shown)
        self._tell_canvas()

    # ------------------------------------------------------------------ from the canvas
    def opened(self) -> None:
        """Strokes on the slices come here."""
        self._tell_canvas()

    def _tell_canvas(self) -> None:
        stage = getattr(self.bench, "stage", None)
        slices = getattr(stage, "slices", None)
        if slices is None:
            return
        asked = self.asked
        slices.listener = self._drawn
        slices.brush = {
            "on": bool(asked["on"]) and not self.droplets,
            "drags": asked["tool"] == "brush",
            "radius_mm": float(asked["radius_mm"]),
            "square": asked["brush"] == "box",
            "colour": self._colour(),
        }

    def _colour(self) -> str:
        from voxelmat.workflow.blendfacts import blend_facts

        mix = self.bench.mix
        return blend_facts(mix.library, mix.law, mix.blend).colour

    def _drawn(self, axis: str, index: int, points: list[list[float]]) -> None:
        """A stroke on a slice: shares of its width (from the left) and height (from the top)."""
        grid = self.bench.part.grid
        a = "xyz".index(axis)
        u, v = (k for k in range(3) if k != a)
        path = []
        for x, y in points:
            at = [0.0, 0.0, 0.0]
            at[a] = float(grid.centres()[a][index])
            at[u] = grid.origin[u] + x * (grid.upper[u] - grid.origin[u])
            at[v] = grid.origin[v] + (1.0 - y) * (grid.upper[v] - grid.origin[v])
            path.append(at)
        self.bench.guarded(lambda: self._use(axis, path))

    def _use(self, axis: str, path: list[list[float]]) -> None:
        asked = self.asked
        blend = dict(self.bench.mix.blend.fractions)
        more = {"region": asked["region"]} if asked["region"] else {}
        tool = asked["tool"]
        if tool == "replace":
            part = self.bench.part
            cell = part.grid.index_of((path[0][0], path[0][1], path[0][2]))
            old = part.palette[part.labels[cell]] if cell is not None else Blend()
            if old.is_empty:
                raise InputError("There is no material there; click the blend to be replaced.")
            self.call("replace", old=dict(old.fractions), blend=blend, **more)
        elif tool in ("fill", "fill in the slice"):
            at = [round(x, 4) for x in path[0]]
            flat = {"axis": axis} if tool != "fill" else {}
            self.call("fill", at_mm=at, blend=blend, **flat, **more)
        else:
            if tool == "line":
                if self._start is None:
                    self._start = path[0]
                    self.bench.say("Now click where the line ends.")
                    return
                path, self._start = [self._start, path[-1]], None
            edge = min(self.bench.draft.data["grid"]["spacing_mm"])
            to = {"to": dict(self._end().fractions)} if asked["to"] else {}
            flat = {"axis": axis} if asked["brush"] == "disc" else {}
            self.call(
                "stroke", path_mm=thinned_path(path, 0.25 * edge), brush=asked["brush"],
                radius_mm=float(asked["radius_mm"]), blend=blend, **to, **flat, **more,
            )  # fmt: skip

    def _end(self) -> Blend:
        for blend in self.bench.mix.compared:
            if str(blend) == self.asked["to"]:
                return Blend.of(dict(blend.fractions))
        raise InputError("The blend at the end of the gradient is no longer among those compared.")

    # ------------------------------------------------------------------ the screen
    def controls(self) -> list[c.Control]:
        """The tool in hand, then droplets."""
        if self.bench.draft.empty:
            return [c.words("Choose a mesh under Shape first.", tone="hint")]
        asked = self.asked
        data = self.bench.draft.data
        regions = ["everywhere", *(r["name"] for r in data.get("region", []))]
        ends = ["one blend", *(str(b) for b in self.bench.mix.compared)]
        shown = [
            c.toggle("on", "Paint on the slices", bool(asked["on"])),
            c.words(f"In hand: {self.bench.mix.blend} (change it under Material).", tone="hint"),
            c.choice("tool", "Tool", asked["tool"], TOOLS),
        ]
        if asked["tool"] in ("brush", "line"):
            shown += [
                c.choice("brush", "Brush", asked["brush"], BRUSHES),
                c.slider("radius", "Radius", asked["radius_mm"], 0.1, 20.0, 0.1, "mm"),
                c.choice("to", "Gradient to", asked["to"] or ends[0], ends),
            ]
        shown.append(c.choice("region", "Only in", asked["region"] or regions[0], regions))
        if asked["on"]:
            shown.append(
                c.words(
                    "Drag on the slice. By keys: arrows move the brush, Space paints, Page Up and "
                    "Page Down change the slice.", tone="hint",
                )
            )  # fmt: skip
        width = self._window["width"]
        shown += [
            c.heading("As it would print"),
            c.number_box("width", "Window (empty: all)", width, "mm"),
            c.group(
                c.button("droplets", "Show droplets"),
                c.button("voxels", "Show voxels", disabled=not self.droplets, why="they are shown"),
            ),
        ]
        if self.bench.picked is not None and "tray_mm" in self.bench.picked:
            at = ", ".join(number(v) for v in self.bench.picked["tray_mm"])
            shown.append(c.words(f"Round the clicked place: {at} mm on the tray.", tone="hint"))
        return shown

    def act(self, name: str, value: Any) -> None:
        """One of the controls."""
        if name in ("on", "tool", "brush"):
            if name == "on" and value and self.droplets:
                self.show_voxels()
            self.hold(**{name: value})
        elif name == "radius":
            self.hold(radius_mm=number_from(value, "The radius", "mm"))
        elif name == "to":
            self.hold(to="" if value == "one blend" else str(value))
        elif name == "region":
            self.hold(region="" if value == "everywhere" else str(value))
        elif name == "width":
            empty = value in (None, "")
            self._window["width"] = None if empty else number_from(value, "The window", "mm")
        elif name == "droplets":
            width = self._window["width"]
            self.call("show_droplets", **({} if width is None else {"width_mm": width}))
        elif name == "voxels":
            self.call("show_voxels")

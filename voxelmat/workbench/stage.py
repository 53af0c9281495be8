"""What the workbench shows in pictures: the part or a result, in space and as slices."""

from __future__ import annotations

import threading
from pathlib import Path
from typing import Any

import ipywidgets

from voxelmat.errors import InputError, VoxelmatError
from voxelmat.monitor import Monitor
from voxelmat.workbench.bench import Workbench
from voxelmat.workbench.comparison import Comparison, compare
from voxelmat.workbench.eye import Eye
from voxelmat.workbench.glprobe import probe_gl
from voxelmat.workbench.look import Look
from voxelmat.workbench.marks import Marks, marks_of
from voxelmat.workbench.picking import Hit
from voxelmat.workbench.section import code_of
from voxelmat.workbench.shown import Shown, of_part
from voxelmat.workbench.shownresult import FIELDS, of_result
from voxelmat.workbench.sliceview import SliceView
from voxelmat.workbench.spaceview import SpaceView
from voxelmat.workbench.stagetools import AS_SHOWN, asked
from voxelmat.workbench.theme import notice
from voxelmat.workflow.build import Built

__all__ = ["Stage"]

_PAUSE_S = 0.6  # after the last change of what is seen, until it is kept beside the design


class Stage:
    """The left-hand side: pictures that follow the design, or hold what a section puts there.

    What they show (eye, cut, colours, load case) is kept in ``bench.draft.view``.

    Attributes
    ----------
    widget : ipywidgets.Widget
    space : SpaceView or None
        None before there is a part, and where the machine cannot draw with OpenGL.
    slices : SliceView or None
    """

    def __init__(self, bench: Workbench) -> None:
        self._bench = bench
        self._lock = threading.RLock()
        self._guest: Shown | None = None
        self._seen: tuple[Any, ...] = ()
        self._pause: threading.Timer | None = None
        self._pair: Comparison | None = None
        self.space: SpaceView | None = None
        self.slices: SliceView | None = None
        self._front: tuple[Any, ...] = ()
        self.widget = ipywidgets.VBox([])
        self._noted = Look.of(self._view)
        bench.listen(self._told)
        if bench.draft.empty:
            self._say("No part yet. Choose a mesh file under Shape, or drop one there.")
        else:
            self._say("The part is being made ...")
            self._follow()

    def _say(self, text: str) -> None:
        self.widget.children = (notice(text),)

    @property
    def _view(self) -> dict[str, Any]:
        return self._bench.draft.view

    # ------------------------------------------------------------------ following the bench
    def _told(self, what: str) -> None:
        if self._bench.draft.empty:
            return
        try:
            self._heard(what)
        except VoxelmatError as error:  # must not stop the work that told it
            self._bench.say(str(error), bad=True)

    def _heard(self, what: str) -> None:
        if what == "design":
            self._guest = None
            self._follow()
            return
        news = what == "answers" and self._guest is None and self._seen != self._answered()
        if news or (what == "highlight" and self.slices is not None):
            self._again()

    def _follow(self) -> None:
        """Build the part beside the screen and show it; a newer change takes its place."""
        self._bench.jobs.submit("making the part", self._build, key="picture")

    def _build(self, monitor: Monitor) -> None:
        self._draw(self._bench.build(monitor))

    def _again(self) -> None:
        """Draw anew: at once where the part is known, else when it has been made."""
        ready = self._bench.ready
        if ready is None:
            self._follow()
        else:
            self._draw(ready)

    def _answered(self) -> tuple[Any, ...]:
        answers = self._bench.answers
        return id(answers.best), answers.stale

    def _draw(self, built: Built) -> None:
        with self._lock:
            self._seen = self._answered()
            notes: tuple[str, ...] = ()
            shown = self._guest
            if shown is None:
                shown, notes = self._wanted(built)
            marks, troubles = self._marks(shown, built)
            self._put(shown, marks, (*notes, *troubles))

    def _wanted(self, built: Built) -> tuple[Shown, tuple[str, ...]]:
        """The part in its materials, or a result in the colours of a field."""
        colour = self._view.get("colour", {})
        field, answers = colour.get("by", "material"), self._bench.answers
        if field not in FIELDS:
            return of_part(built.part), ()
        best = answers.best
        if best is None:
            return of_part(built.part), (f"{field}: no answer yet",)
        case = self._view.get("case", "")
        result = best.results.get(case) or next(iter(best.results.values()))
        notes = [f"load case {result.load_case.name}"]
        if answers.stale:
            notes.append("out of date: the design has changed since")
        elif best.coarsening > 1:
            notes.append("quick answer, on coarser voxels")
        shown = of_result(result, field, colour.get("factor"), below=colour.get("below"))
        return shown, ("; ".join(notes),)

    def _marks(self, shown: Shown, built: Built) -> tuple[Marks, tuple[str, ...]]:
        case = next((c for c in built.load_cases if c.name == self.case), None)
        pointed = built.regions.get(str(self._view.get("highlight", "")))
        try:
            return marks_of(shown.solid, case if self.loads else None, pointed), ()
        except VoxelmatError as error:  # a region that another grid does not hold
            return Marks(), (f"Loads are not drawn: {error}",)

    def _put(self, shown: Shown, marks: Marks, notes: tuple[str, ...]) -> None:
        tools = self._tools(shown)
        if self.slices is None:
            self.slices = SliceView(shown)
            probe = probe_gl()
            if probe.works:
                self.space = self._new_space(shown)
                self._front = (self.space,)
            else:
                self._front = (notice(f"No view in space: {probe.reason}"),)
            self.widget.children = (*self._front, self.slices)
        else:
            self.slices.show(shown)
        if self.space is not None:
            self.space.show(shown, marks, tools, notes)

    def _new_space(self, shown: Shown) -> SpaceView:
        space = SpaceView(shown, Look.of(self._view), Eye.of(self._view.get("eye", {})))
        space.ask, space.changed, space.picked = self._asked, self._changed, self._picked
        return space

    def _tools(self, shown: Shown) -> dict[str, Any]:
        best = self._bench.answers.best
        paints = ["material", *(FIELDS if best is not None else ())]
        painted = shown.painted
        if self._guest is not None:
            painted = AS_SHOWN
            paints.insert(0, painted)
        names = [c["name"] for c in self._bench.draft.data.get("load_case", [])]
        return {
            "paints": paints,
            "painted": painted,
            "cases": names,
            "case": self.case,
            "loads": self.loads,
            "below": self._view.get("colour", {}).get("below") or "",
        }

    # ------------------------------------------------------------------ verbs
    def show(self, shown: Shown) -> None:
        """Show something else than the part, until the design changes or `colour_by`."""
        self._guest = shown
        ready = self._bench.ready
        if ready is not None:
            self._draw(ready)
        else:
            with self._lock:
                self._put(shown, Marks(), ())

    @property
    def case(self) -> str:
        """The load case whose loads are drawn."""
        names = [c["name"] for c in self._bench.draft.data.get("load_case", [])]
        chosen = str(self._view.get("case", ""))
        return chosen if chosen in names or not names else names[0]

    @property
    def field(self) -> str:
        """The field that the colours mean, or "displacement" where they are those of materials."""
        by = self._view.get("colour", {}).get("by", "material")
        return str(by) if by in FIELDS else "displacement"

    @property
    def loads(self) -> bool:
        """Whether loads and supports are drawn."""
        return bool(self._view.get("loads", True))

    def colour_by(self, field: str = "material", load_case: str = "", factor: float = 0.0) -> None:
        """Colour the part by its materials, or by a field of the best answers there are.

        Parameters
        ----------
        field : str
            "material", "displacement", "von Mises stress", "stress over strength", ...
        load_case : str
            The one shown before where left out.
        factor : float
            By which displacements are drawn larger; 0 chooses one.

        Raises
        ------
        InputError
            For a field that there is not.
        """
        if field != "material" and field not in FIELDS:
            raise InputError(f"There is no field '{field}'; use one of {', '.join(FIELDS)}.")
        self._guest = None
        colour = {**self._view.get("colour", {}), "by": field, "factor": factor or None}
        self._keep(colour=colour, **({"case": load_case} if load_case else {}))
        self._again()

    def only_below(self, safety: float = 0.0) -> None:
        """Draw only voxels whose safety lies below a number in full, the rest as a ghost.

        Safety is strength over von Mises stress, of the best answers there are; 0 draws all.
        """
        if safety < 0:
            raise InputError(f"The safety must be above 0, or 0 for all voxels; got {safety}.")
        colour = dict(self._view.get("colour", {}))
        if safety and colour.get("by", "material") == "material":
            colour["by"] = "stress over strength"
        self._keep(colour={**colour, "below": safety or None})
        self._again()

    def show_loads(self, on: bool = True) -> None:
        """Draw the loads and supports of the load case, or not."""
        self._keep(loads=bool(on))
        self._again()

    def choose_case(self, name: str) -> None:
        """Draw the loads of this load case, and its answers where a field is shown."""
        names = [c["name"] for c in self._bench.draft.data.get("load_case", [])]
        if name not in names:
            raise InputError(f"There is no load case '{name}'; there are {', '.join(names)}.")
        self._keep(case=name)
        self._again()

    def see(self, name: str, how: str) -> None:
        """Show a material, a blend or a body, hide it or leave its ghost (`how`)."""
        self._in_space().see(name, how)

    def cut_away(self, share: float, axis: str = "y", above: bool = False) -> None:
        """Cut at a share (0 to 1) of the box; see `SpaceView.cut_away`."""
        self._in_space().cut_away(share, axis, above)

    def screenshot(self, path: str | Path) -> Path:
        """Write the picture in space as PNG, twice as large."""
        return self._in_space().screenshot(path)

    def compare(self, first: Any, second: Any, names: tuple[str, str] = ("", "")) -> Comparison:
        """Show two parts or results side by side in place of the picture in space."""
        pair = compare(first, second, names=names, leave=self.one_picture)
        with self._lock:
            self._end_pair()
            self._pair = pair
            self.widget.children = (pair.widget, *([self.slices] if self.slices else []))
        return pair

    def one_picture(self) -> None:
        """Back from two designs side by side to the one under edit."""
        with self._lock:
            self._end_pair()
            if self.slices is not None:
                self.widget.children = (*self._front, self.slices)

    def _end_pair(self) -> None:
        if self._pair is not None:
            self._pair.close()
            self._pair = None

    def _in_space(self) -> SpaceView:
        if self.space is None:
            raise InputError(f"There is no view in space yet. {probe_gl().reason}".rstrip())
        return self.space

    def jpeg(self) -> bytes:
        """The present picture in space; empty where there is none."""
        return self.space.jpeg() if self.space is not None else b""

    # ------------------------------------------------------------------ from the picture
    def _asked(self, message: dict[str, Any]) -> bool:
        return asked(self._bench, self, message)

    def _changed(self, what: str) -> None:
        space = self.space
        if space is None or what == "moving":
            return
        if what == "look":
            self._keep(**space.look.kept())
        else:
            self._keep(eye=space.eye.kept())

    def _picked(self, hit: Hit, facts: dict[str, Any]) -> None:
        self._bench.pick(hit.place_mm, **facts)

    # ------------------------------------------------------------------ keeping the view
    def _keep(self, **what: Any) -> None:
        self._view.update(what)
        with self._lock:
            if self._pause is not None:
                self._pause.cancel()
            self._pause = threading.Timer(_PAUSE_S, self._write)
            self._pause.daemon = True
            self._pause.start()

    def _write(self) -> None:
        """A moment after the last change: note where the cut lies, and keep the view."""
        look, last = Look.of(self._view), self._noted
        if (look.axis, look.share, look.above) != (last.axis, last.share, last.above):
            self._noted = look
            values = {"share": round(look.share, 4), "axis": look.axis, "above": look.above}
            line = f"bench.stage.{code_of('cut_away', values)}"
            script = self._bench.script
            if script and script[-1].startswith("bench.stage.cut_away("):
                script.pop()  # one line for one drag
            script.append(line)
            self._bench.tell("view")
        self._bench.draft.autosave()

    def close(self) -> None:
        """Free the pictures."""
        with self._lock:
            if self._pause is not None:
                self._pause.cancel()
                self._bench.draft.autosave()
            self._end_pair()
        for view in (self.space, self.slices):
            if view is not None:
                view.close()

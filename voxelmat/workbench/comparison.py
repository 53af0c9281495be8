"""`compare(a, b)`: two designs or results side by side, one camera, one scale of colours."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import ipywidgets
import numpy as np

from voxelmat.errors import InputError
from voxelmat.model.part import Part
from voxelmat.model.result import StaticResult
from voxelmat.workbench.glprobe import probe_gl
from voxelmat.workbench.look import Look
from voxelmat.workbench.shown import Shown, of_part
from voxelmat.workbench.shownresult import FIELDS, field_values, of_result
from voxelmat.workbench.spaceview import SpaceView
from voxelmat.workbench.stills import drawn_without_gl, still_picture
from voxelmat.workbench.theme import notice
from voxelmat.workflow.report_fields import magnification

__all__ = ["Comparison", "compare"]

_SIZE = (560, 480)  # of each picture, pixels


class Comparison:
    """Two pictures that turn together; a notebook displays it.

    Attributes
    ----------
    left, right : SpaceView or None
        None where the machine cannot draw with OpenGL.
    widget : ipywidgets.Widget
    """

    def __init__(
        self,
        first: Part | StaticResult,
        second: Part | StaticResult,
        field: str,
        names: tuple[str, str],
        leave: Callable[[], None] | None,
    ) -> None:
        self._things = first, second
        self._leave = leave
        self._names = [n or _name(t) for n, t in zip(names, self._things, strict=True)]
        self.field = field
        shown = self._both(field, None)
        self.left: SpaceView | None = None
        self.right: SpaceView | None = None
        probe = probe_gl()
        columns: list[Any] = []
        if probe.works:
            views = [SpaceView(s, Look(share=0.0), size=_SIZE) for s in shown]
            self.left, self.right = views
            half = max(v.room_for(0.0) for v in views)
            for view, other in zip(views, reversed(views), strict=True):
                view.room_for(half)
                view.changed = _follow(view, other)
                view.ask = self._asked
            for view, column in zip(views, ("vm-one", "vm-two"), strict=True):
                view.add_class(column)
            columns = views
        else:
            for name, one in zip(self._names, shown, strict=True):
                still = still_picture(drawn_without_gl(one), one.title)
                columns.append(ipywidgets.VBox([notice(name), still]))
        pair = ipywidgets.Box(columns)
        pair.add_class("vm-pair")
        rest = [] if probe.works else [notice(f"The pictures stand still. {probe.reason}")]
        self.widget = ipywidgets.VBox([pair, *rest])
        self._show(shown)

    # ------------------------------------------------------------------ verbs
    def paint(self, field: str, factor: float | None = None) -> None:
        """Colour both by "material" or by a field, deformed by one factor.

        Raises
        ------
        InputError
            For a field that is none, or where one of the two is no result.
        """
        shown = self._both(field, factor)
        self.field = field
        self._show(shown)

    def look_from(self, azimuth: float, elevation: float) -> None:
        """Stand at an azimuth round z from x+ and an elevation, degrees; both do."""
        if self.left is not None:
            self.left.look_from(azimuth, elevation)

    def cut_away(self, share: float, axis: str = "y", above: bool = False) -> None:
        """Cut both at the same share of their boxes."""
        if self.left is not None:
            self.left.cut_away(share, axis, above)

    def close(self) -> None:
        """Free the pictures."""
        for view in (self.left, self.right):
            if view is not None:
                view.close()
        self.widget.close()

    def _repr_mimebundle_(self, include: Any = None, exclude: Any = None) -> dict[str, Any]:
        """The live pictures, and their names for a notebook without a kernel."""
        bundle = self.widget._repr_mimebundle_(include=include, exclude=exclude)
        data: dict[str, Any] = dict(bundle[0] if isinstance(bundle, tuple) else bundle or {})
        data["text/plain"] = f"{' and '.join(self._names)} (run this cell for the live view)"
        return data

    # ------------------------------------------------------------------ inside
    def _both(self, field: str, factor: float | None) -> list[Shown]:
        results = [t for t in self._things if isinstance(t, StaticResult)]
        if field == "material":
            return [of_part(t.part if isinstance(t, StaticResult) else t) for t in self._things]
        if len(results) < 2:
            raise InputError(f"'{field}' needs two results; one of these is only a part.")
        if factor is None:
            factor = min(magnification(r) for r in results)
        tops = [
            float(np.max(field_values(r, field)[0], where=r.part.solid, initial=0.0))
            for r in results
        ]
        return [of_result(r, field, factor, top=max(tops)) for r in results]

    def _show(self, shown: list[Shown]) -> None:
        fields = all(isinstance(t, StaticResult) for t in self._things)
        tools: dict[str, Any] = {
            "paints": ["material", *(FIELDS if fields else ())],
            "several": self._leave is not None,
            "more": [(g.name, g.colour) for s in shown for g in s.solid.groups],
        }
        views = [v for v in (self.left, self.right) if v is not None]
        for view, name, one in zip(views, self._names, shown, strict=False):
            view.show(one, None, tools, (name,))

    def see(self, name: str, how: str) -> None:
        """Show a material or a body, hide it, or leave its ghost, wherever it occurs.

        Raises
        ------
        InputError
            If there is nothing of that name in either.
        """
        views = [v for v in (self.left, self.right) if v is not None]
        known = {g for v in views for g in v.materials}
        if name not in known:
            raise InputError(f"There is no '{name}'; there are {', '.join(sorted(known))}.")
        for view in views:
            view.match(view.look.seen(name, how))

    def _asked(self, message: dict[str, Any]) -> bool:
        kind, value = message["kind"], message.get("value")
        if kind == "one" and self._leave is not None:
            self._leave()
        elif kind == "see":
            self.see(str(message["name"]), str(message["how"]))
        elif kind == "paint":
            self.paint(str(value))
        elif kind == "factor":
            try:
                self.paint(self.field, float(str(value)))
            except ValueError:
                raise InputError(f"The factor is a number; got '{value}'.") from None
        else:
            return False
        return True


def _follow(view: SpaceView, other: SpaceView) -> Callable[[str], None]:
    """What one view changes, the other does too."""

    def changed(what: str) -> None:
        if what == "look":
            other.match(view.look)
        else:
            other.stand(view.eye, moving=what == "moving")

    return changed


def _name(thing: Part | StaticResult) -> str:
    if isinstance(thing, StaticResult):
        return f"{thing.part.name}, load case {thing.load_case.name}"
    return thing.name


def _thing(given: Any) -> Part | StaticResult:
    if isinstance(given, Part | StaticResult):
        found = given
    elif isinstance(getattr(given, "part", None), Part):
        found = given.part
    else:
        raise InputError(f"Parts, results and designs can be compared; got {type(given).__name__}.")
    part = found.part if isinstance(found, StaticResult) else found
    if not part.solid.any():
        raise InputError(f"Part '{part.name}' has no material, so there is nothing to show.")
    return found


def compare(
    first: Any,
    second: Any,
    *,
    field: str = "",
    names: tuple[str, str] = ("", ""),
    leave: Callable[[], None] | None = None,
) -> Comparison:
    """Two designs side by side: one camera, one cut, one scale of lengths and of colours.

    Parameters
    ----------
    first, second : Part, StaticResult or DesignResult
        Or anything with a ``part``.
    field : str
        What the colours mean: "material" or a field of two results; where left out, the
        displacement of two results, else the materials.
    names : tuple of str
        Written over the pictures.
    leave : callable, optional
        What the button "One picture" does; there is none where left out.

    Returns
    -------
    Comparison

    Raises
    ------
    InputError
        For anything else, a part without material, or a field that is not there.
    """
    a, b = _thing(first), _thing(second)
    both = isinstance(a, StaticResult) and isinstance(b, StaticResult)
    return Comparison(a, b, field or ("displacement" if both else "material"), names, leave)

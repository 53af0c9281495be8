"""`show(part)`, `show(result)`, `show(stack)`: a view in space, slices and a table, read-only."""

from __future__ import annotations

from typing import Any

import ipywidgets

from voxelmat.errors import InputError
from voxelmat.model.part import Part
from voxelmat.model.result import StaticResult
from voxelmat.workbench.glprobe import probe_gl
from voxelmat.workbench.hook import register
from voxelmat.workbench.shown import Shown, of_part
from voxelmat.workbench.shownresult import of_result
from voxelmat.workbench.sliceview import SliceView
from voxelmat.workbench.spaceview import SpaceView
from voxelmat.workbench.stills import drawn_without_gl, still_picture
from voxelmat.workbench.theme import notice

__all__ = ["View", "register", "show"]

#: Views that stay live at once; showing more closes the oldest, which says so.
MOST = 12
_live: list[tuple[str, View]] = []


class View:
    """What `show` returns; a notebook displays it.

    Attributes
    ----------
    space : SpaceView or None
        The view in space: ``view.space.cut_away(0.5, "y")``, ``view.space.look_from(-60, 25)``.
        None where the machine cannot draw with OpenGL.
    slices : SliceView
        ``view.slices.index = 12``, ``view.slices.axis = "x"``, ``view.slices.field = ...``.
    """

    def __init__(self, shown: Shown) -> None:
        self.title = shown.title
        self._html = shown.html
        self.space: SpaceView | None = None
        self.slices = SliceView(shown)
        parts: list[ipywidgets.Widget] = []
        probe = probe_gl()
        if probe.works:
            self.space = SpaceView(shown)
            self._still = self.space.jpeg()
            parts.append(self.space)
        else:
            self._still = drawn_without_gl(shown)
            parts.append(still_picture(self._still, shown.title))
            parts.append(
                notice(f"The picture above stands still and is not deformed. {probe.reason}")
            )
        parts.append(self.slices)
        parts.append(ipywidgets.HTML(shown.html))
        self.widget = ipywidgets.VBox(parts)

    def close(self) -> None:
        """Free what the view holds; its last picture stays in the notebook."""
        if self.space is not None:
            self.space.status = "Closed: run the cell again to turn it."
            self.space.close()
        self.slices.close()
        self.widget.close()

    def _repr_html_(self) -> str:
        return self._html

    def _repr_mimebundle_(self, include: Any = None, exclude: Any = None) -> dict[str, Any]:
        """The live widget, and for a notebook without a kernel a still picture."""
        bundle = self.widget._repr_mimebundle_(include=include, exclude=exclude)
        data: dict[str, Any] = dict(bundle[0] if isinstance(bundle, tuple) else bundle or {})
        data["image/jpeg"] = self._still
        data["text/plain"] = f"{self.title} (run this cell for the live view)"
        return data


def show(thing: Any) -> View:
    """A read-only view of a part, a result or a stack.

    Parameters
    ----------
    thing : Part, StaticResult or Stack
        An object that has one of these as its ``part`` is taken for that part.

    Returns
    -------
    View

    Raises
    ------
    InputError
        For anything else, or for a part without material.
    """
    view = View(_shown(thing))
    _keep(view)
    return view


def _shown(thing: Any) -> Shown:
    from voxelmat.printing.readback import Stack

    if isinstance(thing, StaticResult):
        _check(thing.part)
        return of_result(thing)
    if isinstance(thing, Stack):
        from voxelmat.workbench.shownstack import of_stack

        return of_stack(thing)
    part = thing if isinstance(thing, Part) else getattr(thing, "part", None)
    if isinstance(part, Part):
        _check(part)
        return of_part(part)
    raise InputError(f"A part, a result or a stack can be shown; got {type(thing).__name__}.")


def _check(part: Part) -> None:
    if not part.solid.any():
        raise InputError(f"Part '{part.name}' has no material, so there is nothing to show.")


def _cell() -> tuple[str, str]:
    """Which cell runs, and which run of it this is; empty outside a notebook."""
    from IPython import get_ipython

    shell = get_ipython()
    kernel = getattr(shell, "kernel", None)
    if kernel is None:
        return "", ""
    parent = kernel.get_parent()
    metadata = parent.get("metadata") or {}
    return str(metadata.get("cellId", "")), str(parent.get("header", {}).get("msg_id", ""))


def _keep(view: View) -> None:
    """Close what an earlier run of this cell has shown, and the oldest view beyond `MOST`."""
    cell, run = _cell()
    for key, old in list(_live):
        if cell and key.startswith(f"{cell} ") and key != f"{cell} {run}":
            _live.remove((key, old))
            old.close()
    _live.append((f"{cell} {run}", view))
    while len(_live) > MOST:
        _live.pop(0)[1].close()

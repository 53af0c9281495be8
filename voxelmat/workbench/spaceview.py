"""The part in space: JPEG frames over the notebook's own channel, and all that is done on them."""

from __future__ import annotations

import threading
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import anywidget
import numpy as np
import traitlets

from voxelmat.errors import InputError
from voxelmat.io.atomic import write_bytes
from voxelmat.units import number
from voxelmat.workbench.captions import Line
from voxelmat.workbench.eye import Eye
from voxelmat.workbench.look import Look
from voxelmat.workbench.marks import Marks, tinted
from voxelmat.workbench.picking import Hit
from voxelmat.workbench.pointer import Pointer
from voxelmat.workbench.render import SIZE, Scene
from voxelmat.workbench.shown import Shown
from voxelmat.workbench.theme import script, style

__all__ = ["SpaceView"]

_MOVING, _STILL = 60, 85  # JPEG quality


class SpaceView(anywidget.AnyWidget):
    """What is shown, in space.

    Parameters
    ----------
    shown : Shown
    look : Look, optional
        What of it is drawn; the half in front is cut away where left out.
    eye : Eye, optional
    size : tuple of int
        Width and height of the pictures, pixels.

    Attributes
    ----------
    ask : callable or None
        ``ask(message)`` is given what was done on the picture first; True where it did it.
    changed : callable or None
        ``changed(what)`` after the "look" or the "eye" is another one.
    picked : callable or None
        ``picked(hit, facts)`` after a place was clicked.

    Raises
    ------
    RuntimeError
        Where the machine cannot draw with OpenGL; the message says what to install.
    """

    _esm = script("spacebar.js", "space.js")
    _css = style("space.css")
    frame = traitlets.Bytes(b"").tag(sync=True)
    seq = traitlets.Int(0).tag(sync=True)
    ack = traitlets.Int(0).tag(sync=True)
    label = traitlets.Unicode("").tag(sync=True)
    legend = traitlets.Dict().tag(sync=True)
    tools = traitlets.Dict().tag(sync=True)
    said = traitlets.Unicode("").tag(sync=True)
    status = traitlets.Unicode("").tag(sync=True)

    def __init__(
        self,
        shown: Shown,
        look: Look | None = None,
        eye: Eye | None = None,
        size: tuple[int, int] = SIZE,
        **traits: Any,
    ) -> None:
        self._shown, self._marks = shown, Marks()
        self._look = Look(share=0.5) if look is None else look
        self._extra: dict[str, Any] = {}
        self._more_notes: tuple[str, ...] = ()
        self._lock = threading.RLock()
        self._pointer = Pointer()
        self.ask: Callable[[dict[str, Any]], bool] | None = None
        self.changed: Callable[[str], None] | None = None
        self.picked: Callable[[Hit, dict[str, Any]], None] | None = None
        self._scene = Scene(*shown.solid.box, size)
        if eye is not None:
            self._scene.eye = eye
        super().__init__(**traits)
        self.on_msg(self._told)
        self.show(shown)

    # ------------------------------------------------------------------ what is drawn
    def show(
        self,
        shown: Shown,
        marks: Marks | None = None,
        tools: dict[str, Any] | None = None,
        notes: tuple[str, ...] = (),
    ) -> None:
        """Draw something else from now on, cut and seen as before.

        Parameters
        ----------
        shown : Shown
        marks : Marks, optional
            Loads and supports on it.
        tools : dict, optional
            What else the tool bar offers; see `voxelmat.workbench.stage.Stage`.
        notes : tuple of str
            Written into the picture besides what is known of the part.
        """
        with self._lock:
            if not np.array_equal(shown.solid.box, self._shown.solid.box):
                self._pointer.hits = []
                self._scene.frame(*shown.solid.box)
            self._shown, self._marks = shown, marks or Marks()
            self._extra, self._more_notes = dict(tools or {}), notes
            self.label, self.legend = f"3-D view of {shown.title}", shown.legend
            self._draw()

    def cut_away(self, share: float, axis: str = "y", above: bool = False) -> None:
        """Take away what lies below a plane, or above it.

        Parameters
        ----------
        share : float
            Where the plane lies, 0 to 1 of the box along `axis`.
        axis : str
        above : bool
        """
        self._looks(replace(self._look, share=share, axis=axis, above=above))

    def see(self, name: str, how: str) -> None:
        """Show a material, a blend or a body, hide it, or leave its ghost.

        Parameters
        ----------
        name : str
            As in the tool bar: a resin's name, "blends of ...", "body ...".
        how : str
            "shown", "ghost" or "hidden".

        Raises
        ------
        InputError
            If there is nothing of that name.
        """
        if name not in self.materials:
            there = ", ".join(self.materials)
            raise InputError(f"There is no '{name}' in the picture; there are {there}.")
        self._looks(self._look.seen(name, how))

    @property
    def materials(self) -> list[str]:
        """Names of what `see` can hide: resins, blends, bodies."""
        return [g.name for g in self._shown.solid.groups]

    @property
    def look(self) -> Look:
        """What of the part is drawn."""
        return self._look

    @property
    def eye(self) -> Eye:
        """Where the viewer stands."""
        return self._scene.eye

    def match(self, look: Look) -> None:
        """Draw what another view draws, without telling anybody."""
        with self._lock:
            self._look = look
            self._draw()

    def _looks(self, look: Look) -> None:
        self.match(look)
        self._tell("look")

    def _tell(self, what: str) -> None:
        if self.changed is not None:
            self.changed(what)

    def _draw(self, quality: int = _STILL) -> None:
        solid = self._shown.solid
        self._surface = solid.surface(self._look)
        rgb = tinted(solid, self._surface, self._marks.tints)
        arrows = [a for a in self._marks.arrows if not solid.is_cut_off(a.place, self._look)]
        self._scene.put(self._surface, rgb, arrows)
        first = "; ".join(t for t in (self._shown.note, *self._surface.words) if t)
        second = "; ".join(self._marks.notes)
        self._scene.notes = [t for t in (first, second, *self._more_notes) if t]
        self._scene.lines = self._lines()
        self._push(quality)

    def _push(self, quality: int = _STILL) -> None:
        picture = self._scene.jpeg(quality)
        with self.hold_sync():
            self.tools = self._tools()
            self.frame = picture
            self.status = ""
            self.seq += 1

    def _tools(self) -> dict[str, Any]:
        """What the tool bar shows."""
        look, solid, shown = self._look, self._shown.solid, self._shown
        n = solid.drawn.grid.shape["xyz".index(look.axis)]
        groups = {g.name: g.colour for g in solid.groups} | dict(self._extra.get("more", ()))
        return {
            "materials": [[name, colour, look.how(name)] for name, colour in groups.items()],
            "paints": list(shown.paints),
            "painted": shown.painted,
            "factor": shown.factor,
            "axis": look.axis,
            "share": look.share,
            "above": look.above,
            "step": 1.0 / n,
            "plane": f"{look.axis} = {number(solid.plane_mm(look))} mm",
            "measuring": self._pointer.measuring,
            **self._extra,
        }

    # ------------------------------------------------------------------ the eye
    def look_from(self, azimuth: float, elevation: float) -> None:
        """Stand at an azimuth round z from x+ and an elevation, degrees."""
        with self._lock:
            self.eye.azimuth, self.eye.elevation = azimuth, elevation
            self._push()
        self._tell("eye")

    def stand(self, eye: Eye, moving: bool = False) -> None:
        """Stand where another viewer stands."""
        with self._lock:
            self._scene.eye = replace(eye)
            self._push(_MOVING if moving else _STILL)

    def room_for(self, half_mm: float) -> float:
        """Have room for at least this half height at zoom 1; what it is afterwards, mm."""
        with self._lock:
            return self._scene.room_for(half_mm)

    def fit(self) -> None:
        """Move and zoom so that what is drawn fills the picture."""
        with self._lock:
            self._scene.fit()
            self._push()
        self._tell("eye")

    # ------------------------------------------------------------------ pointing
    def pick(self, x: float = 0.5, y: float = 0.5) -> dict[str, Any] | None:
        """What lies at a place of the picture, shares of its width and height from the top left.

        Returns
        -------
        dict or None
            ``place_mm`` on the part before it deforms, ``material``, ``blend``, ``body``,
            ``voxel`` and ``fields``; None where there is nothing opaque.
        """
        with self._lock:
            right, up = self._scene.line_of_sight(x, y)
            solid = self._shown.solid
            hit = solid.pick(self._surface, self.eye.axes(), right, up, self._look)
            if hit is None:
                self.said = "Nothing opaque lies there."
                return None
            facts = {
                **solid.material_at(hit.voxel),
                "fields": self._shown.values_at(hit.voxel),
            }
            self._pointer.add(hit)
            self._scene.lines = self._lines()
            self.said = self._pointer.words(self._shown, facts)
            self._push()
        if self.picked is not None:
            self.picked(hit, facts)
        return {"place_mm": hit.place_mm, **facts}

    def measure(self, on: bool) -> None:
        """With it on, two clicks give the distance between two places; off forgets them."""
        with self._lock:
            self._pointer.measuring, self._pointer.hits = bool(on), []
            self.said = "Click two places on the part." if on else ""
            self._scene.lines = self._lines()
            self._push()

    @property
    def distance(self) -> tuple[float, tuple[float, float, float]] | None:
        """Distance of the two places that were measured, mm, and its part along x, y, z."""
        return self._pointer.distance

    def _lines(self) -> list[Line]:
        ruler = self._pointer.ruler(self._shown)
        return [*self._marks.lines, *([ruler] if ruler else [])]

    # ------------------------------------------------------------------ pictures
    def jpeg(self) -> bytes:
        """The present picture."""
        return bytes(self.frame)

    def png(self) -> bytes:
        """The present picture, twice as large, over the legend of its colours."""
        with self._lock:
            return self._scene.png(self.legend)

    def screenshot(self, path: str | Path) -> Path:
        """Write the present picture as PNG, twice as large.

        Raises
        ------
        ResourceError
            If it cannot be written.
        """
        target = Path(path)
        if target.suffix.lower() != ".png":
            raise InputError(f"A picture is written as .png; got '{target.name}'.", key="path")
        write_bytes(target, self.png())
        return target

    def close(self) -> None:
        """Free the plotter and the channel."""
        self._scene.close()
        super().close()

    # ------------------------------------------------------------------ from the screen
    def _told(self, _: Any, message: dict[str, Any], buffers: Any) -> None:
        # Runs beside cells, on other threads; an exception would be lost, so it is shown.
        try:
            if not self._scene.closed and not (self.ask is not None and self.ask(message)):
                self._act(message)
        except Exception as error:  # noqa: BLE001
            self.status = f"Error: {error}"
        finally:
            if not self._scene.closed:
                self.ack += 1

    def _act(self, message: dict[str, Any]) -> None:
        kind = message["kind"]
        moving = bool(message.get("moving"))
        if kind in ("turn", "pan", "zoom", "view", "still"):
            with self._lock:
                self.eye.told(message, self._scene.size[1] * self._scene.pixel_mm)
                self._push(_MOVING if moving else _STILL)
            self._tell("moving" if moving else "eye")
        elif kind == "fit":
            self.fit()
        elif kind == "cut":
            self.cut_away(message["share"], str(message["axis"]), bool(message["above"]))
        elif kind == "other side":
            self._looks(self._look.turned_over())
        elif kind == "slide":
            self._slide(float(message["dx"]), float(message["dy"]))
        elif kind == "pick":
            self.pick(float(message["x"]), float(message["y"]))
        elif kind == "measure":
            self.measure(bool(message["on"]))
        elif kind == "see":
            self.see(str(message["name"]), str(message["how"]))
        elif kind == "picture":
            self.send({"kind": "picture", "name": f"{_plain(self._shown.title)}.png"}, [self.png()])
        elif kind == "paper":
            with self._lock:
                self._scene.dark = bool(message["dark"])
                self._push()
        elif kind == "size":
            with self._lock:
                if self._scene.fill(float(message["width"]), float(message["ratio"])):
                    self._push()
        elif kind in ("paint", "factor") and self._shown.repaint is not None:
            self._repaint(kind, message["value"])
        else:
            raise InputError(f"The picture cannot do '{kind}'.")

    def _slide(self, dx: float, dy: float) -> None:
        """Move the cutting plane with the pointer: shares of the picture's height."""
        a = "xyz".index(self._look.axis)
        low, high = self._shown.solid.box
        step = self._scene.along(a, dx, dy) / (high - low)[a]
        self._looks(replace(self._look, share=self._look.share + step))

    def _repaint(self, kind: str, value: Any) -> None:
        shown = self._shown
        if shown.repaint is None:
            return
        if kind == "paint":
            self.show(shown.repaint(str(value), shown.factor))
            return
        try:
            factor = float(value)
        except (TypeError, ValueError):
            raise InputError(f"The factor is a number; got '{value}'.") from None
        self.show(shown.repaint(shown.painted, factor))


def _plain(title: str) -> str:
    """A title as a file name."""
    return "".join(c if c.isalnum() or c in "-_" else "-" for c in title)[:80] or "picture"

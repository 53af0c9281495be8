"""The part in space: JPEG frames over the notebook's own channel, turned with mouse or keys."""

from __future__ import annotations

import threading
from typing import Any

import anywidget
import traitlets

from voxelmat.workbench.render import Scene
from voxelmat.workbench.shown import Shown
from voxelmat.workbench.theme import script, style

__all__ = ["SpaceView"]


_VIEWS = {"x": (0.0, 0.0), "y": (-90.0, 0.0), "z": (-90.0, 89.0), "i": (-62.0, 24.0)}


class SpaceView(anywidget.AnyWidget):
    """What is shown, in space.

    Parameters
    ----------
    shown : Shown

    Raises
    ------
    RuntimeError
        Where the machine cannot draw with OpenGL; the message says what to install.
    """

    _esm = script("space.js")
    _css = style()
    frame = traitlets.Bytes(b"").tag(sync=True)
    seq = traitlets.Int(0).tag(sync=True)
    label = traitlets.Unicode("").tag(sync=True)
    legend = traitlets.Dict().tag(sync=True)
    status = traitlets.Unicode("").tag(sync=True)
    cut = traitlets.Float(0.5).tag(sync=True)
    cut_axis = traitlets.Unicode("y").tag(sync=True)

    def __init__(self, shown: Shown, **traits: Any) -> None:
        self._shown = shown
        self._lock = threading.RLock()
        # The first drawing is of the whole, so that the eye knows its size; then it is cut open.
        self._scene = Scene(*shown.surface("y", 0.0), note=shown.note)
        super().__init__(label=f"3-D view of {shown.title}", legend=shown.legend, **traits)
        self.on_msg(self._told)
        self.cut_away(self.cut, self.cut_axis)

    def cut_away(self, share: float, axis: str = "y") -> None:
        """Take away what lies below `share` (0 to 0.95) of the box along `axis`."""
        with self._lock:
            self.cut, self.cut_axis = min(max(float(share), 0.0), 0.95), axis
            self._scene.swap(*self._shown.surface(axis, self.cut))
            self._push()

    def show(self, shown: Shown) -> None:
        """Draw something else from now on, cut and seen as before."""
        with self._lock:
            self._shown = shown
            self._scene.note = shown.note
            self.label, self.legend = f"3-D view of {shown.title}", shown.legend
            self.cut_away(self.cut, self.cut_axis)

    def look_from(self, azimuth: float, elevation: float) -> None:
        """Stand at an azimuth round z from x+ and an elevation, degrees."""
        with self._lock:
            self._scene.eye.azimuth, self._scene.eye.elevation = azimuth, elevation
            self._push()

    def jpeg(self) -> bytes:
        """The present picture."""
        return bytes(self.frame)

    def close(self) -> None:
        """Free the plotter and the channel."""
        self._scene.close()
        super().close()

    def _push(self, quality: int = 85) -> None:
        picture = self._scene.jpeg(quality)
        with self.hold_sync():
            self.frame = picture
            self.status = ""
            self.seq += 1

    def _told(self, _: Any, message: dict[str, Any], buffers: Any) -> None:
        # Runs beside cells, on other threads; an exception would be lost, so it is shown.
        try:
            with self._lock:
                self._act(message)
        except Exception as error:  # noqa: BLE001
            self.status = f"Error: {error}"

    def _act(self, message: dict[str, Any]) -> None:
        if self._scene.closed:
            return
        kind = message["kind"]
        if kind == "cut":
            self.cut_away(float(message["share"]), str(message["axis"]))
        elif kind == "view":
            self.look_from(*_VIEWS[message["to"]])
        elif kind == "turn":
            self._scene.eye.turn(0.5 * float(message["dx"]), 0.5 * float(message["dy"]))
            self._push(60 if message.get("moving") else 85)
        elif kind == "zoom":
            eye = self._scene.eye
            eye.zoom = min(50.0, max(0.2, eye.zoom * float(message["factor"])))
            self._push()
        else:
            self._push()

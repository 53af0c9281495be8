"""A slice of a volume with a slider, an axis and a field to choose: an anywidget canvas."""

from __future__ import annotations

import io
import threading
from collections.abc import Callable
from typing import Any

import anywidget
import traitlets
from PIL import Image

from voxelmat.workbench.shown import Shown
from voxelmat.workbench.theme import script, style

__all__ = ["SliceView"]


class SliceView(anywidget.AnyWidget):
    """Slices of what is shown.

    Setting `axis`, `index` or `field` from a cell does what the controls do. With `brush` on,
    strokes drawn on the canvas are given to `listener`: axis, index and points.

    Parameters
    ----------
    shown : Shown
    """

    _esm = script("slice.js")
    _css = style()
    axis = traitlets.Unicode("z").tag(sync=True)
    index = traitlets.Int(0).tag(sync=True)
    field = traitlets.Unicode("").tag(sync=True)
    axes = traitlets.List(traitlets.Unicode()).tag(sync=True)
    fields = traitlets.List(traitlets.Unicode()).tag(sync=True)
    count = traitlets.Int(1).tag(sync=True)
    label = traitlets.Unicode("").tag(sync=True)
    where = traitlets.Unicode("").tag(sync=True)
    frame = traitlets.Unicode("").tag(sync=True)
    legend = traitlets.Dict().tag(sync=True)
    status = traitlets.Unicode("").tag(sync=True)
    size_mm = traitlets.List(traitlets.Float(), default_value=[1.0, 1.0]).tag(sync=True)
    picture = traitlets.Bytes(b"").tag(sync=True)
    seq = traitlets.Int(0).tag(sync=True)
    brush = traitlets.Dict().tag(sync=True)

    def __init__(self, shown: Shown, **traits: Any) -> None:
        self._shown = shown
        self._lock = threading.RLock()
        self._ready = False
        axis = shown.axes[-1] if len(shown.axes) == 1 else shown.best_axis
        super().__init__(
            axes=list(shown.axes),
            fields=[f.name for f in shown.fields],
            axis=axis,
            field=shown.fields[0].name,
            index=shown.counts[axis] // 2,
            label=f"Slice of {shown.title}",
            **traits,
        )
        self._ready = True
        self.listener: Callable[[str, int, list[list[float]]], None] | None = None
        self.on_msg(self._told)
        self.observe(self._changed, ["axis", "index", "field"])
        self._push()

    def _told(self, _: Any, message: dict[str, Any], buffers: Any) -> None:
        """A stroke was drawn: points as shares of the slice's width and height."""
        if message.get("kind") == "stroke" and self.listener is not None:
            points = [[float(u), float(v)] for u, v in message["points"]]
            self.listener(str(message["axis"]), int(message["index"]), points)
            self._push()  # what was drawn ahead of the answer is replaced by what is

    def show(self, shown: Shown) -> None:
        """Draw something else from now on, at the same place where it has one."""
        with self._lock:
            self._shown = shown
            self._ready = False
            names = [f.name for f in shown.fields]
            with self.hold_sync():
                self.axes, self.fields = list(shown.axes), names
                self.label = f"Slice of {shown.title}"
                if self.axis not in shown.axes:
                    self.axis = shown.best_axis
                if self.field not in names:
                    self.field = names[0]
            self._ready = True
            self._push()

    @traitlets.validate("axis")  # type: ignore[untyped-decorator]
    def _known_axis(self, proposal: dict[str, Any]) -> str:
        if proposal["value"] not in self._shown.axes:
            raise traitlets.TraitError(f"axis is one of {', '.join(self._shown.axes)}.")
        return str(proposal["value"])

    def _changed(self, change: dict[str, Any]) -> None:
        # Callbacks come beside cells and on other threads; what goes wrong in one is lost
        # unless it is put on the screen.
        try:
            if not self._ready:
                return
            if change["name"] == "axis":
                with self.hold_trait_notifications():
                    self.index = self._shown.counts[self.axis] // 2
            self._push()
        except Exception as error:  # noqa: BLE001
            self.status = f"Error: {error}"

    def _push(self) -> None:
        with self._lock:
            field = next(f for f in self._shown.fields if f.name == self.field)
            count = self._shown.counts[self.axis]
            index = min(max(self.index, 0), count - 1)
            store = io.BytesIO()
            Image.fromarray(field.slice_rgb(self.axis, index)).save(store, "PNG", compress_level=1)
            with self.hold_sync():  # one message: the picture and its number arrive together
                self.index = index
                self.count = count
                self.size_mm = list(self._shown.size_mm(self.axis))
                self.where = self._shown.where(self.axis, index)
                self.frame = self._shown.frame(self.axis)
                self.legend = field.legend
                self.picture = store.getvalue()
                self.status = ""
                self.seq += 1

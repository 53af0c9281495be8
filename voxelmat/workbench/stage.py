"""What the workbench shows in pictures: the part or a result, in space and as slices."""

from __future__ import annotations

import threading
from typing import Any

import ipywidgets

from voxelmat.monitor import Monitor
from voxelmat.workbench.bench import Workbench
from voxelmat.workbench.glprobe import probe_gl
from voxelmat.workbench.shown import Shown, of_part
from voxelmat.workbench.sliceview import SliceView
from voxelmat.workbench.spaceview import SpaceView
from voxelmat.workbench.theme import notice

__all__ = ["Stage"]


class Stage:
    """The left-hand side: pictures that follow the design, or hold what a section puts there.

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
        self.space: SpaceView | None = None
        self.slices: SliceView | None = None
        self.widget = ipywidgets.VBox([])
        bench.listen(self._told)
        if bench.draft.empty:
            self._say("No part yet. Choose a mesh file under Shape, or drop one there.")
        else:
            self._say("The part is being made ...")
            self._follow()

    def _say(self, text: str) -> None:
        self.widget.children = (notice(text),)

    def _told(self, what: str) -> None:
        if what == "design" and not self._bench.draft.empty:
            self._follow()

    def _follow(self) -> None:
        """Build the part beside the screen and show it; a newer change takes its place."""
        self._bench.jobs.submit("making the part", self._build, key="picture")

    def _build(self, monitor: Monitor) -> None:
        self.show(of_part(self._bench.build(monitor).part))

    def show(self, shown: Shown) -> None:
        """Show something, seen from where the eye stands."""
        with self._lock:
            if self.slices is None:
                self.slices = SliceView(shown)
                probe = probe_gl()
                parts: list[Any] = []
                if probe.works:
                    self.space = SpaceView(shown)
                    parts.append(self.space)
                else:
                    parts.append(notice(f"No view in space: {probe.reason}"))
                self.widget.children = (*parts, self.slices)
                return
            if self.space is not None:
                self.space.show(shown)
            self.slices.show(shown)

    def jpeg(self) -> bytes:
        """The present picture in space; empty where there is none."""
        return self.space.jpeg() if self.space is not None else b""

    def close(self) -> None:
        """Free the pictures."""
        for view in (self.space, self.slices):
            if view is not None:
                view.close()

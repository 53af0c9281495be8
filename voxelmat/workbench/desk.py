"""The right-hand side of the workbench: tabs, controls, undo, message and line of code."""

from __future__ import annotations

import threading
from typing import Any

import anywidget
import traitlets

from voxelmat.workbench import controls as c
from voxelmat.workbench.bench import Workbench
from voxelmat.workbench.theme import script, style

__all__ = ["Desk"]

_BIGGEST_FILE = 512 << 20  # bytes that a dropped file may have


class Desk(anywidget.AnyWidget):
    """Shows the sections of a workbench and passes on what is done there.

    The whole screen is one plain description, `screen`, which the script draws; a click comes
    back as a message. Holds no truth of its own but which tab is open.

    Parameters
    ----------
    bench : Workbench
    """

    _esm = script("desk.js")
    _css = style()
    screen = traitlets.Dict().tag(sync=True)
    seq = traitlets.Int(0).tag(sync=True)
    tab = traitlets.Unicode("").tag(sync=True)

    def __init__(self, bench: Workbench, **traits: Any) -> None:
        self._bench = bench
        self._drawing = threading.Lock()
        first = str(bench.draft.view.get("tab", next(iter(bench.sections))))
        super().__init__(tab=first if first in bench.sections else "", **traits)
        self.tab = self.tab or next(iter(bench.sections))
        self.on_msg(self._told)
        bench.listen(self._heard)
        self.refresh()

    def _heard(self, what: str) -> None:
        if what == "file":
            while self._bench.outbox:
                name, data = self._bench.outbox.pop(0)
                self.send({"kind": "file", "name": name}, buffers=[data])
            return
        self.refresh()

    def refresh(self) -> None:
        """Describe the screen anew and send it where it differs."""
        if not self._drawing.acquire(blocking=False):
            self._again = True  # whoever is at it does it once more
            return
        try:
            self._again = True
            while self._again:
                self._again = False
                screen = self._described()
                if screen != self.screen:
                    with self.hold_sync():
                        self.screen = screen
                        self.seq += 1
        finally:
            self._drawing.release()

    _again = False

    def _described(self) -> dict[str, Any]:
        bench = self._bench
        section = bench.sections[self.tab]
        try:
            shown = section.controls()
        except Exception as error:  # noqa: BLE001 (a section that fails must not take the rest along)
            shown = [c.words(str(error), tone="bad")]
        job = bench.jobs.current
        return {
            "title": bench.draft.data["name"],
            "tabs": [[s.name, s.title] for s in bench.sections.values()],
            "tab": self.tab,
            "controls": shown,
            "message": bench.message or bench.trouble,
            "bad": bench.message_is_bad if bench.message else bool(bench.trouble),
            "line": bench.script[-1] if bench.script else "",
            "script": "\n".join(bench.script),
            "undo": bench.draft.undo_label,
            "redo": bench.draft.redo_label,
            "unsaved": bench.draft.unsaved,
            "job": None
            if job is None or job.over
            else {"name": job.stage, "done": job.done, "total": job.total, "s": int(job.seconds)},
        }

    def _told(self, _: Any, message: dict[str, Any], buffers: list[Any]) -> None:
        # Runs beside cells, on other threads; `guarded` shows what goes wrong.
        self._bench.guarded(lambda: self._act(message, buffers))
        self.refresh()

    def _act(self, message: dict[str, Any], buffers: list[Any]) -> None:
        bench, kind = self._bench, message["kind"]
        if kind == "tab" and message["to"] in bench.sections:
            self.tab = message["to"]
            bench.draft.view["tab"] = self.tab
            bench.draft.autosave()
            bench.tell("view")
        elif kind == "undo":
            label = bench.noted("bench.undo()", bench.undo)
            bench.say(f"Taken back: {label}." if label else "There is nothing to take back.")
        elif kind == "redo":
            label = bench.noted("bench.redo()", bench.redo)
            bench.say(f"Made again: {label}." if label else "There is nothing to make again.")
        elif kind == "stop":
            bench.jobs.cancel_all()
        elif kind == "act":
            value = message.get("value")
            if message.get("file"):
                data = bytes(buffers[0])[:_BIGGEST_FILE]
                value = (str(message["file"]), data)
            bench.sections[message["section"]].act(str(message["name"]), value)

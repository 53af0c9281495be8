"""The workbench without its screen: a design under edit, what was built and solved, the script."""

from __future__ import annotations

import threading
from collections.abc import Callable
from pathlib import Path
from typing import Any

from voxelmat.errors import InputError, VoxelmatError
from voxelmat.model.design import Design
from voxelmat.model.part import Part
from voxelmat.monitor import SILENT, Monitor
from voxelmat.workbench.jobs import Job, Jobs
from voxelmat.workbench.section import Section
from voxelmat.workbench.sections import sections_of
from voxelmat.workflow.build import Built, build
from voxelmat.workflow.draft import Draft
from voxelmat.workflow.draft_keys import add_at, key_words, remove_at, set_at
from voxelmat.workflow.shapecache import ShapeCache

__all__ = ["Workbench"]


class Workbench:
    """What the screen and a script both work on.

    Parameters
    ----------
    design : path
        A design file; where there is none, an empty design of that name begins.

    Attributes
    ----------
    draft : Draft
        The design under edit.
    jobs : Jobs
        The one worker for all that takes long.
    sections : dict
        By name; each is an attribute too: ``bench.loads``.
    script : list of str
        The lines of code of everything that was done on the screen, in order.
    trouble : str
        Why the design cannot be made into a part as it stands; empty where it can.
    picked : dict or None
        The last place that was clicked: ``place_mm``, and what is known of it.
    """

    def __init__(self, design: str | Path) -> None:
        self.draft = Draft(design)
        self.shapes = ShapeCache()
        self.jobs = Jobs(self._job_changed)
        self.script: list[str] = []
        self.message, self.message_is_bad = " ".join(self.draft.notices), False
        self._lock = threading.RLock()
        self._listeners: list[Callable[[str], None]] = []
        self._built: tuple[Any, Built] | None = None
        self._noting = False
        self.trouble = ""
        self.picked: dict[str, Any] | None = None
        self.outbox: list[tuple[str, bytes]] = []
        self.sections: dict[str, Section] = {s.name: s for s in sections_of(self)}
        self.draft.listen(self._design_changed)

    def __getattr__(self, name: str) -> Any:
        sections = self.__dict__.get("sections", {})
        if name in sections:
            return sections[name]
        raise AttributeError(f"The workbench has no '{name}'; it has {', '.join(sections)}.")

    # ------------------------------------------------------------------ the design
    @property
    def design(self) -> Design:
        """The design as it stands."""
        return self.draft.design

    def set(self, key: str, value: Any) -> None:
        """Set one value of the design: ``bench.set("load_case[0].load[0].force_N", [0, 60, 0])``.

        Raises
        ------
        InputError
            If there is no such key, or the design would not hold; nothing has changed then.
        """
        self.draft.change(key_words(self.draft.data, key), lambda data: set_at(data, key, value))

    def add(self, key: str, entry: Any) -> None:
        """Add an entry to a list of the design: ``bench.add("region", {"name": ..., ...})``."""
        self.draft.change(f"add to {key}", lambda data: add_at(data, key, entry))

    def remove(self, key: str) -> None:
        """Take a key or an entry out of the design: ``bench.remove("layout[2]")``."""
        self.draft.change(
            f"remove {key_words(self.draft.data, key)}", lambda data: remove_at(data, key)
        )

    def undo(self) -> str:
        """Take the last change back, wherever it was made; its label."""
        return self.draft.undo()

    def redo(self) -> str:
        """Make it again; its label."""
        return self.draft.redo()

    def save(self, path: str | Path | None = None, *, overwrite: bool = False) -> Path:
        """Write the design file; see `voxelmat.workflow.draft.Draft.save`."""
        return self.draft.save(path, overwrite=overwrite)

    # ------------------------------------------------------------------ the part
    def build(self, monitor: Monitor = SILENT) -> Built:
        """The design made concrete; kept until the design changes."""
        with self._lock:
            design = self.design
            key = design.digest, design.name
            if self._built is None or self._built[0] != key:
                try:
                    self._built = (key, build(design, monitor=monitor, shapes=self.shapes))
                except InputError as error:
                    self.trouble = str(error)
                    raise
            self.trouble = ""
            return self._built[1]

    @property
    def ready(self) -> Built | None:
        """What `build` gives, where that is known already; None where it would take time."""
        made = self._built
        if made is None or self.draft.empty:
            return None
        design = self.design
        return made[1] if made[0] == (design.digest, design.name) else None

    @property
    def part(self) -> Part:
        """The part as it is laid out now."""
        return self.build().part

    # ------------------------------------------------------------------ what happens
    def listen(self, listener: Callable[[str], None]) -> None:
        """Call ``listener(what)`` after something changed.

        `what` is "design", "job", "message", "pick", "highlight", or a section's own word.
        """
        self._listeners.append(listener)

    def tell(self, what: str) -> None:
        """Tell every listener; a fault in one is put on the message line, not lost."""
        for listener in list(self._listeners):
            listener(what)

    def say(self, message: str, *, bad: bool = False) -> None:
        """Put a message where the user sees it."""
        self.message, self.message_is_bad = message, bad
        self.tell("message")

    def pick(self, place_mm: tuple[float, float, float], **what: Any) -> None:
        """Note a place on the part that was clicked; sections offer what can be done with it."""
        x, y, z = (round(float(v), 4) for v in place_mm)
        self.picked = {"place_mm": (x, y, z), **what}
        self.tell("pick")

    def highlight(self, region: str) -> None:
        """Show where a region lies, in the pictures; an empty name shows none."""
        self.draft.view["highlight"] = region
        self.tell("highlight")

    def give(self, name: str, data: bytes) -> None:
        """Hand a file to whoever sits at the screen, as a download."""
        self.outbox.append((name, data))
        self.tell("file")

    def noted(self, line: str, action: Callable[[], Any]) -> Any:
        """Do something for the screen and, if it succeeds, note its line of code."""
        outer, self._noting = self._noting, True
        try:
            answer = action()
        finally:
            self._noting = outer
        if not outer:
            self.script.append(line)
        return answer

    def guarded(self, action: Callable[[], Any]) -> None:
        """Do what a click asks for; what goes wrong is shown and nothing is lost."""
        self.message, self.message_is_bad = "", False
        try:
            action()
        except InputError as error:
            self.say(str(error), bad=True)
        except VoxelmatError as error:
            self.say(str(error), bad=True)
        except Exception as error:  # noqa: BLE001 (a callback's exception would be lost)
            self.say(f"A fault in voxelmat ({type(error).__name__}): {error}", bad=True)

    def _design_changed(self) -> None:
        for section in self.sections.values():
            section.design_changed()
        self.tell("design")

    def _job_changed(self, job: Job[Any]) -> None:
        if job.state == "failed":
            self.message, self.message_is_bad = job.message, True
        self.tell("job")

    def close(self) -> None:
        """Stop all work; the draft stays beside the design file."""
        self.jobs.close()

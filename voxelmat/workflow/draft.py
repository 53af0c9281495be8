"""A design under edit: plain data with undo, redo and an autosave beside the design file."""

from __future__ import annotations

import copy
import json
import threading
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from voxelmat.errors import InputError, ResourceError, VoxelmatError
from voxelmat.io.atomic import write_json, write_text
from voxelmat.io.design import complete_design
from voxelmat.io.schema import read_toml
from voxelmat.model.design import FORMAT, Design
from voxelmat.provenance import text_digest
from voxelmat.workflow.draft_steps import difference, patched
from voxelmat.workflow.draft_toml import updated_toml

__all__ = ["Draft", "Step"]

Data = dict[str, Any]
#: Steps that can be undone in a session, and those of them that the autosave keeps.
_MOST_STEPS, _KEPT_STEPS = 1000, 50
_AUTOSAVE_FORMAT = 2


@dataclass(frozen=True, slots=True)
class Step:
    """One change: what it was called, and the design's data before it."""

    label: str
    data: Data


class Draft:
    """The one place where a design under edit lives; screens and scripts both change it here.

    A change is made on a copy and checked as a design file is; what is refused leaves everything
    as it was. Safe to use from threads.

    Parameters
    ----------
    path : path
        The design file. Where there is none, the draft starts empty (no body yet) and `save`
        makes it.

    Raises
    ------
    InputError, FileFormatError
        If the file is no design, or one of a newer version.
    """

    def __init__(self, path: str | Path) -> None:
        self.path = Path(path).absolute()
        self.notices: list[str] = []
        self.view: Data = {}
        self._lock = threading.RLock()
        self._undo: list[Step] = []
        self._redo: list[Step] = []
        self._listeners: list[Callable[[], None]] = []
        self._design: Design | None = None
        self._saved = self._read() if self.path.exists() else _empty(self.path.stem)
        self._data = self._saved
        if self._saved["body"]:
            self._design = complete_design(self._saved, self.path)
        self._restore()

    # ------------------------------------------------------------------ what it holds
    @property
    def data(self) -> Data:
        """The design's tables, to be read only: `change` makes the next ones, on a copy.

        A screen reads them many times a second, so they are not copied here.
        """
        return self._data

    @property
    def empty(self) -> bool:
        """True before there is a body."""
        return not self._data["body"]

    @property
    def design(self) -> Design:
        """The design as it stands.

        Raises
        ------
        InputError
            Where there is no body yet, or a file that it names is gone.
        """
        with self._lock:
            if self.empty:
                raise InputError("There is no body yet. Choose a mesh file first.")
            if self._design is None:
                self._design = complete_design(self._data, self.path)
            return self._design

    @property
    def unsaved(self) -> bool:
        """True where the design file does not hold what the draft holds."""
        return self._data != self._saved or not self.path.exists()

    @property
    def undo_label(self) -> str:
        """What `undo` would take back; empty for nothing."""
        return self._undo[-1].label if self._undo else ""

    @property
    def redo_label(self) -> str:
        """What `redo` would do again; empty for nothing."""
        return self._redo[-1].label if self._redo else ""

    def listen(self, listener: Callable[[], None]) -> None:
        """Call `listener` after each change, on the thread that made it."""
        self._listeners.append(listener)

    # ------------------------------------------------------------------ changes
    def change(self, label: str, edit: Callable[[Data], None]) -> None:
        """Change the design.

        Parameters
        ----------
        label : str
            Names the change for undo: "force of load case palm".
        edit : callable
            Changes the copy that it is given.

        Raises
        ------
        InputError
            If the result is no design; then nothing has changed.
        """
        with self._lock:
            fresh = copy.deepcopy(self._data)
            edit(fresh)
            if fresh == self._data:
                return
            design = complete_design(fresh, self.path) if fresh["body"] else None
            self._undo.append(Step(label, self._data))
            del self._undo[:-_MOST_STEPS]
            self._redo.clear()
            self._put(_shared(fresh, self._data), design)
        self._tell()

    def drop_last(self) -> None:
        """Take the last change back for good: it is neither to be undone nor made again."""
        with self._lock:
            if self._undo:
                self._put(self._undo.pop().data, None)
        self._tell()

    def undo(self) -> str:
        """Take the last change back and return its label; empty where there is none."""
        return self._step(self._undo, self._redo)

    def redo(self) -> str:
        """Make the last change that was taken back again; empty where there is none."""
        return self._step(self._redo, self._undo)

    def _step(self, source: list[Step], target: list[Step]) -> str:
        with self._lock:
            if not source:
                return ""
            step = source.pop()
            target.append(Step(step.label, self._data))
            self._put(step.data, None)
        self._tell()
        return step.label

    def _put(self, data: Data, design: Design | None) -> None:
        self._data, self._design = data, design
        self.autosave()

    def _tell(self) -> None:
        for listener in list(self._listeners):
            listener()

    # ------------------------------------------------------------------ files
    def save(self, path: str | Path | None = None, *, overwrite: bool = False) -> Path:
        """Write the design file; comments of the file that was read stay where they can.

        Parameters
        ----------
        path : path, optional
            Another file in the same folder (file names in the design start from there).
        overwrite : bool
            Write even where the file was changed by someone else since it was read.

        Raises
        ------
        InputError
            If the file was changed by someone else, or lies in another folder.
        ResourceError
            If it cannot be written; then nothing is lost, here or there.
        """
        with self._lock:
            target = self.path if path is None else Path(path).absolute()
            if target.parent != self.path.parent:
                raise InputError(
                    f"A design is saved in its own folder, '{self.path.parent.name}', because its "
                    f"file names start there; got '{target}'.",
                    key="path",
                )
            if target.exists() and not overwrite:
                known = self._saved if target == self.path else None
                if _plain(read_toml(target)) != known:
                    raise InputError(
                        f"'{target.name}' was changed since it was read, or is another design. "
                        "Save under another name, or say overwrite=True.",
                        key="path",
                    )
            text = target.read_text("utf-8") if target.exists() else ""
            write_text(target, updated_toml(text, self._data))
            old = self._autosave_path
            self.path, self._saved, self._design = target, self._data, None
            if old != self._autosave_path:
                old.unlink(missing_ok=True)
            self.autosave()
        self._tell()
        return target

    @property
    def _autosave_path(self) -> Path:
        return self.path.with_name(f".{self.path.stem}.draft.json")

    def autosave(self) -> None:
        """Write what would be lost in a crash beside the design; a refusal becomes a notice."""
        with self._lock:
            record = {
                "format": _AUTOSAVE_FORMAT,
                "of": text_digest(self._saved),
                "data": self._data,
                "undo": _packed(self._data, self._undo),
                "redo": _packed(self._data, self._redo),
                "view": self.view,
            }
            try:
                write_json(self._autosave_path, record)
            except ResourceError as error:
                words = f"Changes are not kept beside the design: {error}"
                if words not in self.notices:
                    self.notices.append(words)

    def _read(self) -> Data:
        data = _plain(read_toml(self.path))
        complete_design(data, self.path)
        return data

    def _restore(self) -> None:
        """Take up the autosave, if it belongs to this file as it is."""
        if not self._autosave_path.is_file():
            return
        try:
            record = json.loads(self._autosave_path.read_text("utf-8"))
            if record["format"] != _AUTOSAVE_FORMAT:
                raise ValueError("another format")
            data = record["data"]
            if record["of"] != text_digest(self._saved):
                if data != self._saved:
                    aside = self._autosave_path.with_suffix(".old.json")
                    self._autosave_path.replace(aside)
                    self.notices.append(
                        f"'{self.path.name}' was changed since the last session, so its unsaved "
                        f"changes were not taken up; they are kept in '{aside.name}'."
                    )
                return
            design = complete_design(data, self.path) if data["body"] else None
            self._undo = _unpacked(data, record["undo"])
            self._redo = _unpacked(data, record["redo"])
            self.view = dict(record["view"])
        except (OSError, ValueError, LookupError, TypeError, VoxelmatError) as error:
            self.notices.append(
                f"Unsaved changes in '{self._autosave_path.name}' could not be taken up: {error}"
            )
            return
        if data != self._saved:
            self.notices.append("Unsaved changes of the last session are here again.")
        self._data, self._design = data, design


def _empty(name: str) -> Data:
    return {"format": FORMAT, "name": name, "grid": {"spacing_mm": [1.0, 1.0, 1.0]}, "body": []}


def _plain(data: Mapping[str, Any]) -> Data:
    """Through JSON and back, so that what is compared later has the same types."""
    plain: Data = json.loads(json.dumps(data))
    return plain


def _packed(data: Data, steps: list[Step]) -> list[Any]:
    """The newest steps, the newest first, each as what turns the one before it into it."""
    packed = []
    for step in reversed(steps[-_KEPT_STEPS:]):
        packed.append([step.label, difference(data, step.data)])
        data = step.data
    return packed


def _unpacked(data: Data, packed: list[Any]) -> list[Step]:
    """The inverse of `_packed`."""
    steps = []
    for label, change in packed:
        data = patched(data, change)
        steps.append(Step(str(label), data))
    return steps[::-1]


def _shared(fresh: Data, old: Data) -> Data:
    """`fresh` with every unchanged table taken from `old`: a thousand steps stay small."""
    out: Data = {}
    for key, value in fresh.items():
        before = old.get(key)
        if value == before:
            out[key] = before
        elif isinstance(value, list) and isinstance(before, list):
            out[key] = [
                before[i] if i < len(before) and item == before[i] else item
                for i, item in enumerate(value)
            ]
        else:
            out[key] = value
    return out

"""`open_workbench(design)`: the pictures on the left, the desk on the right, one object behind."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import ipywidgets

from voxelmat.errors import InputError
from voxelmat.model.design import Design
from voxelmat.workbench.bench import Workbench
from voxelmat.workbench.desk import Desk
from voxelmat.workbench.stage import Stage

__all__ = ["Screen", "open_workbench"]


class Screen(Workbench):
    """A workbench with its widgets; a notebook displays it.

    Parameters
    ----------
    design : path
    """

    def __init__(self, design: str | Path) -> None:
        super().__init__(design)
        self.stage = Stage(self)
        self.desk = Desk(self)
        left = ipywidgets.VBox([self.stage.widget])
        right = ipywidgets.VBox([self.desk])
        left.add_class("vm-left")
        right.add_class("vm-right")
        self.widget = ipywidgets.Box([left, right])
        self.widget.add_class("vm-bench")
        for section in self.sections.values():
            section.opened()

    def close(self) -> None:
        """Stop all work and free the pictures; the draft stays beside the design file."""
        super().close()
        self.stage.close()
        self.desk.close()
        self.widget.close()

    def _repr_mimebundle_(self, include: Any = None, exclude: Any = None) -> dict[str, Any]:
        """The live screen, and for a notebook without a kernel a still picture."""
        bundle = self.widget._repr_mimebundle_(include=include, exclude=exclude)
        data: dict[str, Any] = dict(bundle[0] if isinstance(bundle, tuple) else bundle or {})
        still = self.stage.jpeg()
        if still:
            data["image/jpeg"] = still
        data["text/plain"] = f"{self.draft.path.name} (run this cell to open the workbench)"
        return data


def open_workbench(design: str | Path | Design) -> Screen:
    """Open a design in the workbench.

    Parameters
    ----------
    design : path or Design
        A design file, or a design that was read from one. A name that does not exist yet starts
        an empty design, which is saved there.

    Returns
    -------
    Screen
        Shown by a notebook as the last value of a cell. Everything on it can be called too:
        ``bench.loads.set_force(...)``, ``bench.undo()``, ``bench.save()``.

    Raises
    ------
    InputError, FileFormatError
        If the file is no design, or one of a newer version.
    """
    if isinstance(design, Design):
        if design.path is None:
            raise InputError("This design has no file; save it first, then open the file.")
        design = design.path
    screen = Screen(design)
    _keep(screen)
    return screen


_open: dict[Path, Screen] = {}


def _keep(screen: Screen) -> None:
    """One screen a design: opening it again (running the cell again) closes the old one."""
    old = _open.pop(screen.draft.path, None)
    if old is not None:
        old.close()
    _open[screen.draft.path] = screen

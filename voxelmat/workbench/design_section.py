"""The section of the design itself: its name, voxel size, history, script, and saving."""

from __future__ import annotations

from typing import Any

from voxelmat.errors import InputError
from voxelmat.workbench import controls as c
from voxelmat.workbench.section import Section, number_from

__all__ = ["DesignSection"]

_LINES = 12  # of the script that are shown


class DesignSection(Section):
    """The design as a whole."""

    name = "whole"
    title = "Design"

    def controls(self) -> list[c.Control]:
        """Name, voxels, what can be undone, the script."""
        draft = self.bench.draft
        data = draft.data
        shown = [
            c.text_box("name", "Name", data["name"]),
            c.vector_box("spacing", "Voxel size", data["grid"]["spacing_mm"], "mm"),
            c.text_box("note", "What the part is for", data.get("note", "")),
        ]
        if draft.empty:
            shown.append(c.words("No body yet: choose a mesh under Shape.", tone="hint"))
        saved = f"Saved in {draft.path.name}." if not draft.unsaved else "Not saved yet."
        shown += [
            c.group(
                c.button("save", f"Save {draft.path.name}", main=True, disabled=not draft.unsaved),
                c.words(saved, tone="hint"),
            ),
            c.heading("As a script"),
            c.words(
                "Every step on this screen has a line of code; put them in a cell to repeat them.",
                tone="hint",
            ),
            c.table(
                ["line"], [[line] for line in self.bench.script[-_LINES:]], caption="Last steps"
            ),
        ]
        return shown

    def set_name(self, name: str) -> None:
        """Call the design something else."""
        self.bench.set("name", name)

    def set_note(self, note: str) -> None:
        """Say what the part is for."""
        self.bench.set("note", note)

    def set_spacing(self, spacing_mm: list[float]) -> None:
        """Edges of a voxel along x, y, z, mm."""
        if len(spacing_mm) != 3 or not all(0 < s < 1e3 for s in spacing_mm):
            raise InputError(
                f"The voxel size takes three lengths above 0 mm; got {spacing_mm}.",
                key="grid.spacing_mm",
            )
        self.bench.set("grid.spacing_mm", [float(s) for s in spacing_mm])

    def act(self, name: str, value: Any) -> None:
        """One of the controls."""
        if name == "name":
            self.call("set_name", name=str(value))
        elif name == "note":
            self.call("set_note", note=str(value))
        elif name == "spacing":
            sizes = [number_from(v, "The voxel size", "mm") for v in value]
            self.call("set_spacing", spacing_mm=sizes)
        elif name == "save":
            path = self.bench.noted("bench.save()", self.bench.save)
            self.bench.say(f"Saved in {path.name}.")

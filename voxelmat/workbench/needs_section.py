"""The section of requirements: what the part must do, and the deflections to be designed for."""

from __future__ import annotations

from typing import Any

from voxelmat.errors import InputError
from voxelmat.workbench import controls as c
from voxelmat.workbench.loads_words import need_words
from voxelmat.workbench.section import Section, number_from
from voxelmat.workflow.draft_keys import add_at

__all__ = ["NeedsSection"]

_SIDES = ("x-", "x+", "y-", "y+", "z-", "z+")
#: Measure to the keys of its limits, and whether it takes a load case and a region.
_NEEDS: dict[str, tuple[str, bool, bool]] = {
    "displacement": ("_mm", True, True),
    "stiffness": ("_N_mm", True, True),
    "reaction": ("_N", True, True),
    "safety factor": ("", True, False),
    "interface safety factor": ("", True, False),
    "largest strain": ("", True, False),
    "mass": ("_g", False, False),
}


class NeedsSection(Section):
    """Requirements and target deflections."""

    name = "needs"
    title = "Requirements"

    def __init__(self, bench: Any) -> None:
        super().__init__(bench)
        self._form: dict[str, Any] = {"measure": "displacement", "direction": "z-"}

    # ------------------------------------------------------------------ what it must do
    def require(
        self,
        name: str,
        measure: str,
        at_least: float | None = None,
        at_most: float | None = None,
        region: str = "",
        case: str = "",
    ) -> None:
        """Ask for something: "displacement" (mm), "stiffness" (N/mm), "mass" (g), ..."""
        if measure not in _NEEDS:
            raise InputError(f"A requirement measures one of {', '.join(_NEEDS)}; got {measure!r}.")
        unit, takes_case, takes_region = _NEEDS[measure]
        entry: dict[str, Any] = {"name": name, "measure": measure}
        if takes_case:
            entry["load_case"] = case or self.bench.loads.case
        if region and measure != "mass":
            entry["region"] = region
        elif takes_region:
            raise InputError(f"A requirement on {measure} names a region; choose one.")
        if at_least is not None:
            entry[f"at_least{unit}"] = at_least
        if at_most is not None:
            entry[f"at_most{unit}"] = at_most
        self.bench.draft.change(f"requirement {name}", lambda d: add_at(d, "requirement", entry))

    def remove_requirement(self, requirement: int) -> None:
        """Take a requirement (counted from 0) out."""
        self.bench.remove(f"requirement[{requirement}]")

    def target(self, name: str, region: str, deflection_mm: float, direction: str = "z-") -> None:
        """Ask the optimiser for a deflection of a region under the load case chosen on screen."""
        entry = {
            "name": name,
            "region": region,
            "load_case": self.bench.loads.case,
            "direction": direction,
            "deflection_mm": deflection_mm,
        }
        self.bench.draft.change(f"target {name}", lambda d: add_at(d, "target", entry))

    # ------------------------------------------------------------------ the screen
    def controls(self) -> list[c.Control]:
        """What is asked for, and what can be."""
        if self.bench.draft.empty:
            return [c.words("Choose a mesh under Shape first.", tone="hint")]
        if not self.bench.loads.cases:
            return [c.words("Add a load case under Loads first.", tone="hint")]
        return [*self._need_controls(), *self._target_controls()]

    def _need_controls(self) -> list[c.Control]:
        data = self.bench.draft.data
        rows = [[r["name"], need_words(r)] for r in data.get("requirement", [])]
        form = self._form
        return [
            c.table(["requirement", "asks for"], rows, caption="Requirements", name="need",
                    actions=["Remove"]),
            c.heading("Ask for something"),
            c.text_box("need name", "Its name", str(form.get("need name", ""))),
            c.choice("measure", "Measure", form["measure"], list(_NEEDS)),
            c.number_box("at_least", "At least", form.get("at_least")),
            c.number_box("at_most", "At most", form.get("at_most")),
            c.group(
                c.button("add need", "Ask", main=True),
                c.words("In the region and load case chosen above.", tone="hint"),
            ),
        ]  # fmt: skip

    def _target_controls(self) -> list[c.Control]:
        rows = [
            [t["name"], f"{t['region']} under {t['load_case']}"]
            for t in self.bench.draft.data.get("target", [])
        ]
        return [
            c.table(["target", "of"], rows, caption="Target deflections for the optimiser",
                    name="aim", actions=["Remove"]),
            c.text_box("aim name", "New target", str(self._form.get("aim name", ""))),
            c.number_box("deflection", "Deflection", self._form.get("deflection"), "mm"),
            c.group(
                c.choice("direction", "Along", self._form["direction"], _SIDES),
                c.button("add aim", "Aim"),
            ),
        ]  # fmt: skip

    # ------------------------------------------------------------------ what is done
    def act(self, name: str, value: Any) -> None:
        """One of the controls."""
        if name == "need":
            self.call("remove_requirement", requirement=int(value[1]))
        elif name == "aim":
            self.bench.noted(
                f"bench.remove('target[{int(value[1])}]')",
                lambda: self.bench.remove(f"target[{int(value[1])}]"),
            )
        elif name == "add need":
            self._add_need()
        elif name == "add aim":
            aim = str(self._form.get("aim name", "")).strip()
            if not aim:
                raise InputError("Give the target a name first.")
            depth = number_from(self._form.get("deflection"), "The deflection", "mm")
            self.call("target", name=aim, region=self.bench.loads.region(), deflection_mm=depth,
                      direction=str(self._form["direction"]))  # fmt: skip
        else:
            self._form[name] = value

    def _add_need(self) -> None:
        form = self._form
        limits = {
            k: number_from(form[k], "A limit")
            for k in ("at_least", "at_most")
            if form.get(k) not in (None, "")
        }
        name = str(form.get("need name", "")).strip()
        if not name:
            raise InputError("Give the requirement a name first.")
        if not limits:
            raise InputError("A requirement needs a limit: at least, at most, or both.")
        takes_case, takes_region = _NEEDS[str(form["measure"])][1:]
        where = {"case": self.bench.loads.case} if takes_case else {}
        where |= {"region": self.bench.loads.region()} if takes_region else {}
        self.call("require", name=name, measure=str(form["measure"]), **limits, **where)
        self._form["need name"] = ""

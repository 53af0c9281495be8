"""The section of loads: load cases, where the part is held, and what acts on it."""

from __future__ import annotations

from typing import Any

from voxelmat.errors import InputError
from voxelmat.workbench import controls as c
from voxelmat.workbench.files import bring_in
from voxelmat.workbench.loads_words import load_words, support_words
from voxelmat.workbench.section import Section, number_from
from voxelmat.workflow.draft_keys import add_at

__all__ = ["LoadsSection"]

_HOLDS = ("fixed", "slides along x", "slides along y", "slides along z", "given displacement")
_LOADS = ("force", "pressure", "acceleration", "pressure map")
_SIDES = ("x-", "x+", "y-", "y+", "z-", "z+")


class LoadsSection(Section):
    """Load cases."""

    name = "loads"
    title = "Loads"

    def __init__(self, bench: Any) -> None:
        super().__init__(bench)
        self._form: dict[str, Any] = {
            "hold": "fixed",
            "given": [None, None, None],
            "load": "force",
            "vector": [0.0, 0.0, 0.0],
            "pressure": 0.01,
            "side": "z+",
            "cell": [4.0, 4.0],
            "first": [0.0, 0.0],
        }

    # ------------------------------------------------------------------ load cases
    def add_case(
        self, name: str, duration_s: float = 1.0, temperature_degC: float = 23.0, cycles: int = 1
    ) -> None:
        """Begin a load case: how long it lasts, how warm, how often."""
        entry = {
            "name": name,
            "duration_s": duration_s,
            "temperature_degC": temperature_degC,
            "cycles": cycles,
            "support": [],
            "load": [],
        }
        self.bench.draft.change(f"load case {name}", lambda d: add_at(d, "load_case", entry))
        self._choose(name)

    def remove_case(self, case: str) -> None:
        """Take a load case out; requirements that ask for it must go first."""
        self.bench.remove(f"load_case[{self._at(case)}]")

    def set_case(self, case: str, key: str, value: float) -> None:
        """Set ``duration_s``, ``temperature_degC``, ``cycles`` or ``weight`` of a load case."""
        self.bench.set(f"load_case[{self._at(case)}].{key}", value)

    # ------------------------------------------------------------------ held and loaded
    def hold(
        self,
        region: str,
        case: str = "",
        free: list[str] | None = None,
        displacement_mm: dict[str, float] | None = None,
    ) -> None:
        """Hold a region.

        Parameters
        ----------
        region : str
        case : str
            The load case chosen on screen where left out.
        free : list of str
            Directions left free: ``["x"]``; all are held where left out.
        displacement_mm : dict
            Given displacement by direction, instead.
        """
        entry: dict[str, Any] = {"region": region}
        if displacement_mm is not None:
            entry["displacement_mm"] = displacement_mm
        elif free:
            entry["slide"] = free
        else:
            entry["fixed"] = True
        self._put(case, "support", entry, f"hold {region}")

    def force(self, region: str, force_N: list[float], case: str = "") -> None:
        """Put a force on a region, spread over its surface, N along x, y, z."""
        self._put(case, "load", {"kind": "force", "region": region, "force_N": force_N},
                  f"force on {region}")  # fmt: skip

    def pressure(self, region: str, pressure_MPa: float, case: str = "") -> None:
        """Put a pressure on a region; positive pushes inwards."""
        load = {"kind": "pressure", "region": region, "pressure_MPa": pressure_MPa}
        self._put(case, "load", load, f"pressure on {region}")

    def acceleration(self, acceleration_m_s2: list[float], case: str = "") -> None:
        """Let an acceleration act on the whole part, m/s2 along x, y, z: weight is -9.81 on z."""
        load = {"kind": "body force", "acceleration_m_s2": acceleration_m_s2}
        self._put(case, "load", load, "acceleration")

    def pressure_map(
        self,
        region: str,
        file: str,
        side: str,
        cell_mm: list[float],
        first_cell_mm: list[float],
        unit: str = "kPa",
        case: str = "",
    ) -> None:
        """Lay a table of pressures (CSV, beside the design) on a region, seen from a side.

        Rows grow downwards as the table is seen from outside; other ways can be set in the design
        (``rows_grow``, ``columns_grow``).
        """
        across = [a for a in "xyz" if a != side[0]]
        load = {
            "kind": "pressure map",
            "region": region,
            "file": file,
            "side": side,
            "cell_mm": cell_mm,
            "first_cell_mm": first_cell_mm,
            "columns_grow": f"{across[0]}+",
            "rows_grow": f"{across[1]}-",
            "unit": unit,
        }
        self._put(case, "load", load, f"pressure map on {region}")

    def set_force(self, case: str, load: int, force_N: list[float]) -> None:
        """Change the force of a load (counted from 0) of a load case."""
        self.bench.set(f"load_case[{self._at(case)}].load[{load}].force_N", force_N)

    def set_pressure(self, case: str, load: int, pressure_MPa: float) -> None:
        """Change the pressure of a load (counted from 0) of a load case."""
        self.bench.set(f"load_case[{self._at(case)}].load[{load}].pressure_MPa", pressure_MPa)

    def remove(self, case: str, what: str, number: int) -> None:
        """Take away a "support" or a "load" (counted from 0) of a load case."""
        self.bench.remove(f"load_case[{self._at(case)}].{what}[{number}]")

    # ------------------------------------------------------------------ helpers
    @property
    def cases(self) -> list[str]:
        """Names of the load cases."""
        return [c["name"] for c in self.bench.draft.data.get("load_case", [])]

    @property
    def case(self) -> str:
        """The load case chosen on screen; the first where none is.

        Raises
        ------
        InputError
            If there is none.
        """
        names = self.cases
        if not names:
            raise InputError("There is no load case yet; add one first.")
        chosen = str(self.bench.draft.view.get("case", names[0]))
        return chosen if chosen in names else names[0]

    def _choose(self, case: str) -> None:
        self.bench.draft.view["case"] = case
        self.bench.draft.autosave()
        self.bench.tell("loads")

    def _at(self, case: str) -> int:
        name = case or self.case
        if name not in self.cases:
            raise InputError(f"There is no load case '{name}'; there are {', '.join(self.cases)}.")
        return self.cases.index(name)

    def _put(self, case: str, table: str, entry: dict[str, Any], label: str) -> None:
        at = self._at(case)
        self.bench.draft.change(label, lambda d: add_at(d, f"load_case[{at}].{table}", entry))

    @property
    def _places(self) -> list[str]:
        data = self.bench.draft.data
        regions = [r["name"] for r in data.get("region", [])]
        return [*regions, *(b["name"] for b in data["body"])]

    def region(self) -> str:
        """The region chosen on screen; the first where none is."""
        places = self._places
        if not places:
            raise InputError("There is no region yet; make one under Shape.")
        chosen = str(self._form.get("region", places[0]))
        return chosen if chosen in places else places[0]

    # ------------------------------------------------------------------ the screen
    def controls(self) -> list[c.Control]:
        """The load case, what is in it, and what can be added."""
        if self.bench.draft.empty:
            return [c.words("Choose a mesh under Shape first.", tone="hint")]
        shown: list[c.Control] = []
        if not self.cases:
            shown.append(c.words("No load case yet. Give it a name to begin.", tone="hint"))
        else:
            shown += self._case_controls()
        shown.append(
            c.group(
                c.text_box("case name", "New load case", str(self._form.get("case name", ""))),
                c.button("add case", "Add"),
            )
        )
        return shown

    def _case_controls(self) -> list[c.Control]:
        case = self.bench.draft.data["load_case"][self._at("")]
        held = (
            [[f"held: {s.get('region', '')}", support_words(s)] for s in case["support"]]
            if ("support" in case)
            else []
        )
        loads = [[f"acts: {x.get('region', 'whole part')}", load_words(x)]
                 for x in case.get("load", [])]  # fmt: skip
        shown = [
            c.choice("case", "Load case", case["name"], self.cases),
            c.number_box("set:duration_s", "Lasts", case["duration_s"], "s"),
            c.number_box("set:temperature_degC", "At", case["temperature_degC"], "°C"),
            c.number_box("set:cycles", "Times", case["cycles"]),
            c.table(["where", "what"], held + loads, caption=f"In '{case['name']}'", name="entry",
                    actions=["Show", "Remove"]),
        ]  # fmt: skip
        for i, load in enumerate(case.get("load", [])):
            if load["kind"] == "force":
                shown.append(
                    c.vector_box(f"force:{i}", f"Force on {load['region']}", load["force_N"], "N")
                )
            elif load["kind"] == "pressure":
                shown.append(
                    c.number_box(f"pressure:{i}", f"Pressure on {load['region']}",
                                 load["pressure_MPa"], "MPa")
                )  # fmt: skip
        return [*shown, *self._adding()]

    def _adding(self) -> list[c.Control]:
        places = self._places
        form = self._form
        if not places:
            return [c.words("Make a region under Shape to hold or load.", tone="hint")]
        shown = [
            c.heading("Hold or load a region"),
            c.choice("region", "Region", self.region(), places),
            c.group(c.choice("hold", "Held", form["hold"], _HOLDS), c.button("add hold", "Hold")),
        ]
        if form["hold"] == "given displacement":
            shown.append(c.vector_box("given", "Moved by (empty: free)", form["given"], "mm"))
        shown.append(
            c.group(c.choice("load", "Load", form["load"], _LOADS), c.button("add load", "Load"))
        )
        if form["load"] == "force":
            shown.append(c.vector_box("vector", "Force", form["vector"], "N"))
        elif form["load"] == "acceleration":
            shown.append(c.vector_box("vector", "Acceleration", form["vector"], "m/s2"))
        elif form["load"] == "pressure":
            shown.append(c.number_box("pressure", "Pressure", form["pressure"], "MPa"))
        else:
            shown += [
                c.file_drop("map", "Table of pressures, kPa (CSV)", ".csv"),
                c.choice("side", "Seen from", form["side"], _SIDES),
                c.number_box("cell:0", "Cell along a row", form["cell"][0], "mm"),
                c.number_box("cell:1", "From row to row", form["cell"][1], "mm"),
                c.number_box("first:0", "First cell, first axis", form["first"][0], "mm"),
                c.number_box("first:1", "First cell, second axis", form["first"][1], "mm"),
            ]
        return shown

    # ------------------------------------------------------------------ what is done
    def act(self, name: str, value: Any) -> None:
        """One of the controls."""
        head, _, tail = name.partition(":")
        if name == "case":
            self._choose(str(value))
        elif head == "set":
            amount = number_from(value, "This")
            self.call("set_case", case=self.case, key=tail,
                      value=int(amount) if tail == "cycles" else amount)  # fmt: skip
        elif head == "force":
            force = [number_from(v, "A force", "N") for v in value]
            self.call("set_force", case=self.case, load=int(tail), force_N=force)
        elif head == "pressure" and tail:
            p = number_from(value, "A pressure", "MPa")
            self.call("set_pressure", case=self.case, load=int(tail), pressure_MPa=p)
        elif head in ("cell", "first"):
            self._form[head][int(tail)] = number_from(value, "A length", "mm")
        elif name == "entry":
            self._on_entry(str(value[0]), int(value[1]))
        elif name == "add case":
            self._add_case()
        elif name == "add hold":
            self._add_hold()
        elif name == "add load":
            self._add_load()
        elif name == "map":
            path = bring_in(self.bench.draft.path.parent, value[0], value[1], (".csv",))
            self._form["map"] = path.name
            self.bench.say(f"{path.name} is here; fill in where it lies, then press Load.")
        else:
            self._form[name] = value
            if name == "region":
                self.bench.highlight(str(value))

    def _add_case(self) -> None:
        name = str(self._form.get("case name", "")).strip()
        if not name:
            raise InputError("Give the load case a name first.")
        self.call("add_case", name=name)
        self._form["case name"] = ""

    def _on_entry(self, action: str, row: int) -> None:
        case = self.bench.draft.data["load_case"][self._at("")]
        supports = len(case.get("support", []))
        table, at = ("support", row) if row < supports else ("load", row - supports)
        if action == "Remove":
            self.call("remove", case=self.case, what=table, number=at)
        else:
            self.bench.highlight(str(case[table][at].get("region", "")))

    def _add_hold(self) -> None:
        kind, region = str(self._form["hold"]), self.region()
        if kind == "fixed":
            self.call("hold", region=region, case=self.case)
        elif kind == "given displacement":
            given = {
                a: number_from(v, "A displacement", "mm")
                for a, v in zip("xyz", self._form["given"], strict=True)
                if v not in (None, "")
            }
            self.call("hold", region=region, case=self.case, displacement_mm=given)
        else:
            self.call("hold", region=region, case=self.case, free=[kind[-1]])

    def _add_load(self) -> None:
        kind, form = str(self._form["load"]), self._form
        if kind == "pressure":
            p = number_from(form["pressure"], "A pressure", "MPa")
            self.call("pressure", region=self.region(), pressure_MPa=p, case=self.case)
        elif kind == "pressure map":
            if not form.get("map"):
                raise InputError("Drop the table of pressures first.")
            self.call("pressure_map", region=self.region(), file=form["map"], side=form["side"],
                      cell_mm=list(form["cell"]), first_cell_mm=list(form["first"]),
                      case=self.case)  # fmt: skip
        else:
            unit = "N" if kind == "force" else "m/s2"
            vector = [number_from(v, f"A {kind}", unit) for v in form["vector"]]
            if not any(vector):
                raise InputError(f"The {kind} is 0 along x, y and z; give it a size in {unit}.")
            if kind == "force":
                self.call("force", region=self.region(), force_N=vector, case=self.case)
            else:
                self.call("acceleration", acceleration_m_s2=vector, case=self.case)

"""The question to the optimiser as controls: objective, resins, limits, regions, iterations."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from voxelmat.errors import InputError
from voxelmat.io.materials import load_library
from voxelmat.model.design import Design
from voxelmat.workbench import controls as c
from voxelmat.workbench.section import number_from

if TYPE_CHECKING:
    from voxelmat.workbench.bench import Workbench
    from voxelmat.workbench.optimise_section import OptimiseSection

__all__ = ["asked_changed", "asked_controls", "fresh_table"]

_RADIUS_IN_VOXELS = 2.5
_LISTS = {
    "design_in": "Design in (empty: everything)",
    "keep": "Keep as laid out",
    "solid": "Always solid",
    "empty": "Always empty",
    "protected": "Protected surfaces",
}


def fresh_table(design: Design) -> dict[str, Any]:
    """An ``[optimise]`` table to begin with: stiffest layout at half the volume, or half a resin.

    With one resin its layout is sought in at most half the volume; with more, the stiffest blend
    with at most half of the stiffest resin.
    """
    resins = list(dict.fromkeys(r for body in design.bodies for r in body.blend))
    if not resins:
        raise InputError("No body is printed, so there is nothing to optimise.")
    table: dict[str, Any] = {
        "resins": resins,
        "objective": "compliance",
        "filter_radius_mm": round(_RADIUS_IN_VOXELS * max(design.spacing_mm), 3),
        "void": len(resins) == 1,
        "iterations": 40,
    }
    if len(resins) == 1:
        table["limit"] = [{"kind": "volume", "at_most_fraction": 0.5}]
    else:
        library = load_library([design.file(name) for name in design.material_files])
        stiffest = max(resins, key=lambda name: library[name].E.value)
        table["limit"] = [{"kind": "resin", "resin": stiffest, "at_most_fraction": 0.5}]
    return table


def asked_controls(bench: Workbench) -> list[c.Control]:
    """What the table says, each part of it to be changed."""
    data = bench.draft.data
    table = data["optimise"]
    targets = [t["name"] for t in data.get("target", [])]
    objective = table.get("objective", "")
    shown: list[c.Control] = []
    if objective:
        shown.append(
            c.choice("objective", "Make least", objective, ["compliance", "target deflection"])
        )
    for sense, word in (("minimise", "least"), ("maximise", "greatest")):
        if sense in table:
            shown.append(c.words(f"Makes {word}: {table[sense]['measure']}."))
    if objective == "target deflection":
        shown.append(c.choice("target", "Target", table.get("target", ""), targets))
    shown += [
        c.text_box("resins", "Resins, by comma", ", ".join(table["resins"])),
        c.toggle("void", "May leave voxels empty", table.get("void", False)),
        c.number_box("radius", "Filter radius", table["filter_radius_mm"], "mm"),
        c.number_box("iterations", "Iterations, at most", table.get("iterations", 80)),
    ]
    limits = {(e["kind"], e.get("resin", "")): e for e in table.get("limit", []) if "kind" in e}
    for e in table.get("limit", []):
        for key in (k for k in e if "measure" in e and k.startswith("at_")):
            shown.append(c.words(f"Limit: {e['measure']}, {key.replace('_', ' ')} {e[key]:g}."))
    volume, mass = limits.get(("volume", "")), limits.get(("mass", ""))
    shown += [
        c.number_box("volume", "Volume, at most", _given(volume, "at_most_fraction"), "of 1"),
        c.number_box("mass", "Mass, at most", _given(mass, "at_most_g"), "g"),
    ]
    shown += [
        c.number_box(
            f"share:{r}", f"{r}, at most", _given(limits.get(("resin", r)), "at_most_fraction"),
            "of 1",
        )
        for r in table["resins"]
        if len(table["resins"]) > 1
    ]  # fmt: skip
    shown += [
        c.text_box(f"list:{key}", label, ", ".join(table.get(key, [])))
        for key, label in _LISTS.items()
    ]
    if table.get("skip"):
        shown.append(
            c.words("The layout holds an earlier result; a run in batch takes it as it is.",
                    tone="hint")
        )  # fmt: skip
    return shown


def _given(entry: dict[str, Any] | None, key: str) -> float | None:
    return None if entry is None else float(entry[key])


def _names(text: Any) -> list[str]:
    return [name.strip() for name in str(text).split(",") if name.strip()]


def asked_changed(section: OptimiseSection, name: str, value: Any) -> None:
    """A control of the question was changed."""
    if name == "objective" and value == "target deflection":
        targets = section.bench.draft.data.get("target", [])
        if not targets:
            raise InputError(
                "There is no target deflection in the design. Add one under Loads first: which "
                "surface is to move how far under which load case."
            )
        table = {**section.bench.draft.data["optimise"], "objective": value}
        table.setdefault("target", targets[0]["name"])
        section.bench.noted(
            f"bench.set('optimise', {table!r})", lambda: section.bench.set("optimise", table)
        )
    elif name == "objective":
        table = {**section.bench.draft.data["optimise"], "objective": value}
        table.pop("target", None)
        section.bench.noted(
            f"bench.set('optimise', {table!r})", lambda: section.bench.set("optimise", table)
        )
    elif name == "target":
        section.call("ask", key="target", value=str(value))
    elif name == "resins":
        section.call("ask", key="resins", value=_names(value))
    elif name == "void":
        section.call("ask", key="void", value=bool(value))
    elif name == "radius":
        section.call("ask", key="filter_radius_mm", value=number_from(value, "The radius", "mm"))
    elif name == "iterations":
        section.call("ask", key="iterations", value=int(number_from(value, "Iterations")))
    elif name in ("volume", "mass"):
        most = 0.0 if value in (None, "") else number_from(value, f"The limit of {name}")
        section.call("limit", kind=name, at_most=most)
    elif name.startswith("share:"):
        most = 0.0 if value in (None, "") else number_from(value, "The limit of a resin")
        section.call("limit", kind="resin", at_most=most, resin=name.removeprefix("share:"))
    elif name.startswith("list:"):
        section.call("ask", key=name.removeprefix("list:"), value=_names(value))

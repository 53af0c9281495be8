"""What a schema cannot say about a design: names that must exist, choices that exclude others."""

from __future__ import annotations

import difflib
import re
from collections.abc import Collection, Iterable, Mapping
from typing import Any

import numpy as np

from voxelmat.errors import InputError
from voxelmat.io.design_measures import (
    check_measure,
    measures_of,
    named_in_measures,
    needs_load_case,
)
from voxelmat.model.design import Design, LoadEntry, RequirementEntry, TargetEntry
from voxelmat.model.region import parse_side
from voxelmat.model.requirement import MEASURES

__all__ = ["check_design", "resin_uses"]

_MAP_KEYS = ("cell_mm", "side", "first_cell_mm", "columns_grow", "rows_grow")
_MOST_RESINS = 40
_PICTURES = (".png", ".tif", ".tiff", ".bmp", ".jpg", ".jpeg")


def check_design(design: Design) -> None:
    """Raise `InputError`, with its key, for the first thing that does not fit."""
    _distinct("body", [b.name for b in design.bodies])
    _distinct("region", [r.name for r in design.regions])
    _distinct("load_case", [c.name for c in design.cases])
    _distinct("target", [t.name for t in design.targets])
    _distinct("requirement", [r.name for r in design.requirements])
    _distinct("dimension", [d.name for d in design.dimensions])
    _check_bodies(design)
    places = [r.name for r in design.regions] + [b.name for b in design.bodies]
    for i, region in enumerate(design.regions):
        _check_region(design, i, places[len(design.regions) :])
        if region.name in places[len(design.regions) :]:
            raise InputError(
                f"A body is called '{region.name}' too; a body's name already stands for its "
                "region. Choose another name.",
                key=f"region[{i}].name",
            )
    for name, key in _region_uses(design):
        _known(name, places, "region or body", key)
    cases = [c.name for c in design.cases]
    for i, rule in enumerate(design.layout):
        if rule.kind == "stroke":
            _check_stroke(rule.settings, f"layout[{i}]")
        ends = rule.settings.get("range_mm", (0.0, 1.0))
        if ends[0] == ends[1]:
            raise InputError(
                f"The two ends of a gradient must differ; got {ends[0]} and {ends[1]} mm.",
                key=f"layout[{i}].range_mm",
            )
    for c, case in enumerate(design.cases):
        _distinct(f"load_case[{c}].plate", [p.name for p in case.plates])
        for i, load in enumerate(case.loads):
            if load.kind == "pressure map":
                _check_map(load, f"load_case[{c}].load[{i}]")
            if load.kind == "spring" and not any(load.settings["stiffness_N_mm"]):
                raise InputError(
                    "A spring needs a stiffness above 0 along one axis at least.",
                    key=f"load_case[{c}].load[{i}].stiffness_N_mm",
                )
    for i, target in enumerate(design.targets):
        _known(target.load_case, cases, "load case", f"target[{i}].load_case")
        _check_target(target, f"target[{i}]")
    targets = [t.name for t in design.targets]
    for i, requirement in enumerate(design.requirements):
        _check_requirement(requirement, cases, targets, f"requirement[{i}]")
    _check_optimise(design, targets)
    _check_print(design)


def _check_stroke(settings: Mapping[str, Any], key: str) -> None:
    """A brush has the sizes that it needs, and one blend or two."""
    needs = {"sphere": {"radius_mm"}, "disc": {"radius_mm", "axis", "depth_mm"}, "box": {"size_mm"}}
    sizes = {"radius_mm", "axis", "depth_mm", "size_mm"} & settings.keys()
    wanted = needs[settings["brush"]]
    if sizes != wanted:
        raise InputError(
            f"A stroke of a {settings['brush']} takes {', '.join(sorted(wanted))}; got "
            f"{', '.join(sorted(sizes)) or 'none of them'}.",
            key=key,
        )
    ends = {"blend", "from", "to"} & settings.keys()
    if ends not in ({"blend"}, {"from", "to"}):
        raise InputError("A stroke takes a blend, or two: from and to.", key=key)


def resin_uses(design: Design) -> Iterable[tuple[str, str]]:
    """Every place where a resin is named, with its key."""
    for i, body in enumerate(design.bodies):
        for name in body.blend:
            yield name, f"body[{i}]"
    for i, rule in enumerate(design.layout):
        for end in ("blend", "from", "to", "old"):
            for name in rule.settings.get(end, ()):
                yield name, f"layout[{i}].{end}"
        for name in rule.settings.get("resins", ()):
            yield name, f"layout[{i}].resins"
    for i, region in enumerate(design.regions):
        for name in region.settings.get("blend", ()):
            yield name, f"region[{i}].blend"
    for i, requirement in enumerate(design.requirements):
        if requirement.resin is not None:
            yield requirement.resin, f"requirement[{i}].resin"
    if design.optimise is not None:
        for i, name in enumerate(design.optimise.resins):
            yield name, f"optimise.resins[{i}]"
        for i, (_, name) in enumerate(design.optimise.fixed):
            yield name, f"optimise.fixed[{i}].resin"
        yield from named_in_measures(design.optimise, "resin")


def _known(name: str, known: Collection[str], what: str, key: str) -> None:
    if name in known:
        return
    near = difflib.get_close_matches(name, known, n=1, cutoff=0.5)
    tip = f" Did you mean '{near[0]}'?" if near else ""
    listed = ", ".join(f"'{k}'" for k in known) or "none"
    raise InputError(f"There is no {what} called '{name}'.{tip} Known: {listed}.", key=key)


def _distinct(table: str, names: list[str]) -> None:
    for i, name in enumerate(names):
        if name in names[:i]:
            raise InputError(
                f"The name '{name}' is given twice; names must differ.", key=f"{table}[{i}].name"
            )


def _check_bodies(design: Design) -> None:
    names = [b.name for b in design.bodies]
    for i, (body, table) in enumerate(zip(design.bodies, design.data["body"], strict=True)):
        given = [k for k in ("resin", "blend", "bought_in") if k in table]
        if len(given) != 1:
            raise InputError(
                f"Body '{body.name}' takes exactly one of resin, blend and bought_in; got "
                f"{' and '.join(given) or 'none'}.",
                key=f"body[{i}]",
            )
        if body.clearance_mm > 0 and body.bought_in is None:
            raise InputError(
                f"Body '{body.name}' is printed; only a bought-in body takes a clearance.",
                key=f"body[{i}].clearance_mm",
            )
        _check_blend(table.get("blend"), f"body[{i}].blend")
        _check_unit(body.mesh, body.unit, f"body[{i}]")
        bought = table.get("bought_in", {"name": ""})
        lacking = [k for k in ("E_MPa", "nu", "density_g_cm3") if k not in bought]
        if lacking and list(bought) != ["name"]:
            raise InputError(
                "A bought-in material is a name from the library, or states E_MPa, nu and "
                "density_g_cm3.",
                key=f"body[{i}].bought_in.{lacking[0]}",
            )
    if all(b.bought_in is not None for b in design.bodies):
        raise InputError("Every body is bought in: there is nothing to print.", key="body")
    if design.gaps is not None:
        _known(design.gaps.give_to, names, "body", "gaps.give_to")
        if design.bodies[names.index(design.gaps.give_to)].bought_in is not None:
            raise InputError(
                "Gaps are filled with printed material; name a body that is printed.",
                key="gaps.give_to",
            )


def _check_unit(mesh: str, unit: str | None, key: str) -> None:
    if unit is None and not mesh.lower().endswith(".3mf"):
        raise InputError(
            f"The file '{mesh}' does not state its unit of length; say unit = \"mm\" or another.",
            key=f"{key}.unit",
        )


def _check_blend(blend: dict[str, float] | None, key: str) -> None:
    if blend is not None and not sum(blend.values()) > 0:
        raise InputError("A blend needs at least one part above 0.", key=key)


def _check_region(design: Design, index: int, bodies: list[str]) -> None:
    region, key = design.regions[index], f"region[{index}]"
    if region.kind == "body":
        _known(region.settings["body"], bodies, "body", f"{key}.body")
    if region.kind == "label":
        given = [k for k in ("labels", "blend") if k in region.settings]
        if len(given) != 1:
            raise InputError("A label region takes exactly one of labels and blend.", key=key)
        _check_blend(region.settings.get("blend"), f"{key}.blend")
    if region.kind == "grown":
        _known(region.settings["body"], bodies, "body", f"{key}.body")
    if region.kind == "mesh":
        _check_unit(region.settings["mesh"], region.settings.get("unit"), key)


def _region_uses(design: Design) -> Iterable[tuple[str, str]]:
    """Every place where a region or a body is named, with its key."""
    for i, rule in enumerate(design.layout):
        if rule.region is not None:
            yield rule.region, f"layout[{i}].region"
        if "from_region" in rule.settings:
            yield rule.settings["from_region"], f"layout[{i}].from_region"
    for c, case in enumerate(design.cases):
        for i, support in enumerate(case.supports):
            if support.region is not None:
                yield support.region, f"load_case[{c}].support[{i}].region"
        for i, plate in enumerate(case.plates):
            yield plate.region, f"load_case[{c}].plate[{i}].region"
        for i, load in enumerate(case.loads):
            if load.region is not None:
                yield load.region, f"load_case[{c}].load[{i}].region"
    for i, target in enumerate(design.targets):
        yield target.region, f"target[{i}].region"
    for i, requirement in enumerate(design.requirements):
        if requirement.region is not None:
            yield requirement.region, f"requirement[{i}].region"
    if design.optimise is not None:
        for table in ("design_in", "keep", "solid", "empty", "protected"):
            for i, name in enumerate(getattr(design.optimise, table)):
                yield name, f"optimise.{table}[{i}]"
        for i, (name, _) in enumerate(design.optimise.fixed):
            yield name, f"optimise.fixed[{i}].region"
        yield from named_in_measures(design.optimise, "region")
        for i, name in enumerate(design.optimise.rules.get("zones", ())):
            yield name, f"optimise.zones[{i}]"
        if "region" in (skin := design.optimise.rules.get("skin", {})):
            yield skin["region"], "optimise.skin.region"


def _check_axes(settings: Mapping[str, Any], key: str) -> None:
    """Three different axes, and a map that is not mirrored unawares."""
    side, right, down = np.zeros((3, 3))
    for vector, name in ((side, "side"), (right, "columns_grow"), (down, "rows_grow")):
        axis, sense = parse_side(settings[name], name)
        vector[axis] = sense
    outward = float(np.cross(right, -down) @ side)
    if outward == 0:
        raise InputError(
            "side, columns_grow and rows_grow must lie along three different axes.",
            key=f"{key}.columns_grow",
        )
    seen = settings.get("seen_from", "outside")
    if (outward > 0) != (seen == "outside"):
        other = "inside" if seen == "outside" else "outside"
        raise InputError(
            f"With columns along {settings['columns_grow']} and rows along "
            f"{settings['rows_grow']} on side {settings['side']} the map lies mirrored: it would "
            f"show the surface as seen from {other}. Turn one of the two directions, or say "
            f'seen_from = "{other}" if the map was taken so.',
            key=f"{key}.columns_grow",
        )


def _check_map(load: LoadEntry, key: str) -> None:
    _check_axes(load.settings, key)
    picture = str(load.settings["file"]).lower().endswith(_PICTURES)
    needed, other = ("white_MPa", "unit") if picture else ("unit", "white_MPa")
    if needed not in load.settings:
        what = "a picture" if picture else "a table"
        raise InputError(f"This key is missing: {what} needs it.", key=f"{key}.{needed}")
    if other in load.settings:
        raise InputError(
            f"A map is a picture with white_MPa or a table with unit; leave {other} out.",
            key=f"{key}.{other}",
        )


def _check_target(target: TargetEntry, key: str) -> None:
    if (target.deflection_mm is None) == (target.file is None):
        raise InputError("A target takes exactly one of deflection_mm and file.", key=key)
    if target.file is None:
        for name in target.settings:
            raise InputError("This goes with file, which is not given.", key=f"{key}.{name}")
        return
    for name in _MAP_KEYS:
        if name not in target.settings:
            raise InputError("This key is missing; a file needs it.", key=f"{key}.{name}")
    _check_axes(target.settings, key)


def _check_requirement(
    requirement: RequirementEntry, cases: list[str], targets: list[str], key: str
) -> None:
    unit = MEASURES[requirement.measure].replace("/", "_")
    suffix = f"_{unit}" if unit else ""
    if requirement.at_least is None and requirement.at_most is None:
        raise InputError(
            f"A requirement on {requirement.measure} needs at_least{suffix} or at_most{suffix}.",
            key=key,
        )
    if (
        requirement.at_least is not None
        and requirement.at_most is not None
        and requirement.at_least > requirement.at_most
    ):
        raise InputError(
            f"It asks for at least {requirement.at_least:g} and at most "
            f"{requirement.at_most:g}; nothing is both.",
            key=f"{key}.at_least{suffix}",
        )
    if requirement.load_case is not None:
        _known(requirement.load_case, cases, "load case", f"{key}.load_case")
    if requirement.target is not None:
        _known(requirement.target, targets, "target", f"{key}.target")


def _check_optimise(design: Design, targets: list[str]) -> None:
    ask = design.optimise
    if ask is None:
        return
    if not design.cases and needs_load_case(ask):
        raise InputError(
            "There is no load case to optimise for; add [[load_case]].", key="optimise"
        )
    for entry in measures_of(ask):
        check_measure(entry)
    for name, key in named_in_measures(ask, "load case"):
        _known(name, [c.name for c in design.cases], "load case", key)
    for i, name in enumerate(ask.rules.get("load_scatter", {}).get("load_cases", ())):
        known = [c.name for c in design.cases]
        _known(name, known, "load case", f"optimise.load_scatter.load_cases[{i}]")
    if "resin" in (skin := ask.rules.get("skin", {})):
        _known(skin["resin"], ask.resins, "resin in optimise.resins", "optimise.skin.resin")
    if "zones" in ask.rules and "zone_count" in ask.rules:
        raise InputError("Zones are either named or counted, not both.", key="optimise.zone_count")
    if ask.rules.get("size_from_profile") and design.printing is None:
        raise InputError(
            "Sizes are to follow the print profile, but the design names none; add [print].",
            key="optimise.size_from_profile",
        )
    for name, key in named_in_measures(ask, "target"):
        _known(name, targets, "target", key)
    for name, key in named_in_measures(ask, "resin"):
        _known(name, ask.resins, "resin in optimise.resins", key)
    if (ask.objective == "target deflection") != (ask.target is not None):
        raise InputError(
            "The objective 'target deflection' names a target, and no other objective does.",
            key="optimise.target",
        )
    if ask.target is not None:
        _known(ask.target, targets, "target", "optimise.target")
    if len(set(ask.resins)) != len(ask.resins):
        raise InputError("A resin is named twice.", key="optimise.resins")
    if len(ask.resins) > _MOST_RESINS:
        raise InputError(
            f"A design chooses among at most {_MOST_RESINS} resins; got {len(ask.resins)}.",
            key="optimise.resins",
        )
    if not ask.void and len(ask.resins) < 2:
        raise InputError(
            "With one resin and void = false there is nothing to choose; add a resin, or set "
            "void = true.",
            key="optimise.resins",
        )
    for i, limit in enumerate(ask.limits):
        if limit.resin is not None:
            _known(
                limit.resin, ask.resins, "resin in optimise.resins", f"optimise.limit[{i}].resin"
            )


def _check_print(design: Design) -> None:
    if design.printing is None:
        return
    for i, turn in enumerate(design.printing.orientation):
        degrees = re.search(r"[+-]?\d+", turn)
        if degrees is None or int(degrees[0]) % 90:
            raise InputError(
                f"A build orientation turns by multiples of 90 degrees; got {turn!r}. For another "
                "angle turn the mesh itself.",
                key=f"print.orientation[{i}]",
            )

"""Measures in a design file: what the optimiser makes least or greatest, and what it must keep."""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Mapping
from typing import Any

from voxelmat.errors import InputError
from voxelmat.model.design import OptimiseEntry
from voxelmat.model.measure_entry import MEASURE_KEYS, WITHOUT_LOADS, MeasureEntry

__all__ = [
    "check_measure",
    "measure_goal",
    "measure_limit",
    "measures_of",
    "named_in_measures",
    "needs_load_case",
]

_REGIONS = ("region", "output", "input", "carried", "closed")


def measure_goal(table: Mapping[str, Any]) -> MeasureEntry | None:
    """The ``minimise`` or ``maximise`` table of ``[optimise]``; None where `objective` says it."""
    given = [k for k in ("objective", "minimise", "maximise") if k in table]
    if len(given) != 1:
        raise InputError(
            "The optimiser takes exactly one of objective, minimise and maximise; got "
            f"{' and '.join(given) or 'none'}.",
            key="optimise.objective" if not given else f"optimise.{given[-1]}",
        )
    if given == ["objective"]:
        return None
    sense = given[0]
    asked = table[sense]
    settings = {k: v for k, v in asked.items() if k != "measure"}
    return MeasureEntry(
        measure=asked["measure"],
        sense="minimise" if sense == "minimise" else "maximise",
        settings=settings,
        key=f"optimise.{sense}",
    )


def measure_limit(table: Mapping[str, Any], key: str) -> MeasureEntry:
    """One ``[[optimise.limit]]`` on a measure."""
    measure = table["measure"]
    keys = MEASURE_KEYS[measure]
    end = f"_{keys.suffix}" if keys.suffix else ""
    wanted = (f"at_most{end}", f"at_least{end}")
    given = [k for k in table if k.startswith(("at_most", "at_least"))]
    if len(given) != 1 or given[0] not in wanted:
        raise InputError(
            f"A limit on {measure} takes exactly one of {wanted[0]} and {wanted[1]}; got "
            f"{', '.join(given) or 'neither'}. For both, give two limits.",
            key=f"{key}.{given[0]}" if given and given[0] not in wanted else key,
        )
    value = float(table[given[0]]) * keys.scale
    scale = float(table["scale"]) * keys.scale if "scale" in table else None
    if value == 0 and scale is None:
        raise InputError(
            "A limit of 0 needs a scale: by how much a violation counts as all of it, in the unit "
            "of the limit.",
            key=f"{key}.scale",
        )
    return MeasureEntry(
        measure=measure,
        sense="at_most" if given[0] == wanted[0] else "at_least",
        value=value,
        scale=scale,
        settings={k: v for k, v in table.items() if k not in ("measure", "scale", *given)},
        key=key,
    )


def measures_of(ask: OptimiseEntry) -> list[MeasureEntry]:
    """The goal's measure, then those of the limits."""
    return [*([] if ask.goal is None else [ask.goal]), *ask.measured]


def needs_load_case(ask: OptimiseEntry) -> bool:
    """Whether anything asked is about load cases: the old objectives are."""
    return ask.goal is None or any(e.measure not in WITHOUT_LOADS for e in measures_of(ask))


def named_in_measures(ask: OptimiseEntry, what: str) -> Iterable[tuple[str, str]]:
    """Every region, load case, target or resin that a measure names, with its key."""
    single = {
        "region": _REGIONS,
        "load case": ("load_case", "held_in"),
        "target": ("target",),
        "resin": ("resin",),
    }[what]
    several = {"load case": "load_cases", "resin": "resins"}.get(what)
    for entry in measures_of(ask):
        for name in single:
            if name in entry.settings:
                yield entry.settings[name], f"{entry.key}.{name}"
        for i, name in enumerate(entry.settings.get(several, ()) if several else ()):
            yield name, f"{entry.key}.{several}[{i}]"
        if what == "region":
            yield from _in_heat(entry)


def _in_heat(entry: MeasureEntry) -> Iterable[tuple[str, str]]:
    for table, rows in entry.settings.get("heat_case", {}).items():
        for i, row in enumerate(rows):
            if "region" in row:
                yield row["region"], f"{entry.key}.heat_case.{table}[{i}].region"


def check_measure(entry: MeasureEntry) -> None:
    """Raise `InputError` with its key for a setting that the measure lacks or does not take."""
    keys = MEASURE_KEYS[entry.measure]
    known = (*keys.needs, *keys.may)
    for name in entry.settings:
        if name not in known:
            near = difflib.get_close_matches(name, known, n=1)
            tip = f" Did you mean '{near[0]}'?" if near else ""
            raise InputError(
                f"The measure '{entry.measure}' takes no {name}.{tip} It takes "
                f"{', '.join(known) or 'no setting'}.",
                key=f"{entry.key}.{name}",
            )
    for name in keys.needs:
        if name not in entry.settings:
            raise InputError(
                f"This key is missing; the measure '{entry.measure}' needs it.",
                key=f"{entry.key}.{name}",
            )
    _check_pairs(entry)


def _check_pairs(entry: MeasureEntry) -> None:
    given = entry.settings
    if ("carried" in given) != ("carried_g" in given):
        raise InputError("carried and carried_g go together.", key=f"{entry.key}.carried_g")
    if entry.measure == "contact peak" and ("depth_mm" in given) == ("force_N" in given):
        raise InputError(
            "A contact peak takes exactly one of depth_mm and force_N.", key=f"{entry.key}.depth_mm"
        )
    if entry.measure == "contact peak":
        _check_indenter(given["indenter"], f"{entry.key}.indenter")
    if given.get("property") == "shear plane" and "axes" not in given:
        raise InputError("A shear plane needs its axes.", key=f"{entry.key}.axes")


def _check_indenter(given: Mapping[str, Any], key: str) -> None:
    needs = {"plane": set(), "punch": {"radius_mm"}, "ball": {"radius_mm"},
             "roller": {"radius_mm", "along"}}[given["shape"]]  # fmt: skip
    sizes = {"radius_mm", "along"} & given.keys()
    if sizes != needs:
        raise InputError(
            f"A {given['shape']} takes {', '.join(sorted(needs)) or 'no size'}; got "
            f"{', '.join(sorted(sizes)) or 'none'}.",
            key=key,
        )

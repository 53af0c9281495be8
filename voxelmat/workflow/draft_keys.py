"""Reads and changes plain design data by keys such as ``load_case[0].load[1].force_N``."""

from __future__ import annotations

import copy
import re
from typing import Any

from voxelmat.errors import InputError

__all__ = ["add_at", "get_at", "key_words", "remove_at", "set_at"]

_STEP = re.compile(r"([A-Za-z_][\w-]*)((?:\[\d+\])*)$")


def _steps(key: str) -> list[str | int]:
    """The names and numbers of a key, in order."""
    steps: list[str | int] = []
    for piece in key.split("."):
        match = _STEP.match(piece)
        if match is None:
            raise InputError(
                f"A key is written as in 'load_case[0].load[1].force_N'; got {key!r}.", key=key
            )
        steps.append(match[1])
        steps += [int(n) for n in re.findall(r"\d+", match[2])]
    return steps


def _down(data: Any, steps: list[str | int], key: str) -> Any:
    for step in steps:
        try:
            data = data[step]
        except (LookupError, TypeError):
            there = (
                f"It has {', '.join(map(str, data)) or 'nothing'}."
                if isinstance(data, dict)
                else f"It has {len(data)} entries."
                if isinstance(data, list)
                else ""
            )
            raise InputError(f"The design has no '{step}' there. {there}", key=key) from None
    return data


def get_at(data: dict[str, Any], key: str) -> Any:
    """The value under `key`.

    Raises
    ------
    InputError
        If there is none, saying what there is.

    Examples
    --------
    >>> get_at({"load_case": [{"name": "palm"}]}, "load_case[0].name")
    'palm'
    """
    return _down(data, _steps(key), key)


def set_at(data: dict[str, Any], key: str, value: Any) -> None:
    """Put `value` under `key`; tables on the way that are missing are made."""
    *way, last = _steps(key)
    place: Any = data
    for n, step in enumerate(way):
        if isinstance(place, dict) and step not in place and isinstance(step, str):
            following = way[n + 1] if n + 1 < len(way) else last
            if isinstance(following, int):
                raise InputError(f"The design has no '{step}' there.", key=key)
            place[step] = {}
        place = _down(place, [step], key)
    if isinstance(last, int):
        _down(place, [last], key)
    try:
        place[last] = copy.deepcopy(value)  # the caller may go on changing his own
    except TypeError:
        raise InputError("There is no table to put this into.", key=key) from None


def add_at(data: dict[str, Any], key: str, entry: Any) -> None:
    """Append `entry` to the list under `key`, which is made where it is missing."""
    *way, last = _steps(key)
    place = _down(data, way, key)
    if isinstance(place, dict) and isinstance(last, str):
        found = place.setdefault(last, [])
    else:
        found = _down(place, [last], key)
    if not isinstance(found, list):
        raise InputError("This is not a list, so nothing can be added to it.", key=key)
    found.append(copy.deepcopy(entry))


def remove_at(data: dict[str, Any], key: str) -> None:
    """Take out what is under `key`."""
    *way, last = _steps(key)
    place = _down(data, way, key)
    _down(place, [last], key)
    del place[last]


def key_words(data: dict[str, Any], key: str) -> str:
    """A key with names instead of numbers where entries have one, for people.

    Examples
    --------
    >>> key_words({"load_case": [{"name": "palm", "load": [{}]}]}, "load_case[0].load[0].force_N")
    "load case 'palm', load 1, force N"
    """
    said: list[str] = []
    place: Any = data
    for step in _steps(key):
        if isinstance(step, str):
            said.append(step.replace("_", " "))
            place = place.get(step) if isinstance(place, dict) else None
            continue
        place = place[step] if isinstance(place, list) and step < len(place) else None
        name = place.get("name") if isinstance(place, dict) else None
        said[-1] += f" '{name}'" if name else f" {step + 1}"
    return ", ".join(said)

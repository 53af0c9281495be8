"""Steps of a draft as what they changed: a design of many strokes is kept once, not once a step."""

from __future__ import annotations

from typing import Any

__all__ = ["difference", "patched"]

Data = dict[str, Any]


def difference(start: Data, end: Data) -> Data:
    """What turns `start` into `end`; as plain data.

    Tables are compared by key, lists by what they begin and end with alike.

    Examples
    --------
    >>> difference({"a": 1, "b": [1, 2, 3]}, {"b": [1, 9, 3], "c": 0})
    {'drop': ['a'], 'put': {'c': 0}, 'list': {'b': [1, 1, [9]]}}
    """
    found: Data = {"drop": [k for k in start if k not in end], "put": {}, "list": {}}
    for key, value in end.items():
        before = start.get(key)
        if key in start and _same(before, value):
            continue
        if isinstance(before, list) and isinstance(value, list):
            found["list"][key] = _list_difference(before, value)
        else:
            found["put"][key] = value
    return found


def patched(start: Data, change: Data) -> Data:
    """`start` after a change that `difference` found; what did not change is shared with it.

    Examples
    --------
    >>> patched({"a": 1, "b": [1, 2, 3]}, {"drop": ["a"], "put": {}, "list": {"b": [1, 1, [9]]}})
    {'b': [1, 9, 3]}
    """
    out = {k: v for k, v in start.items() if k not in change["drop"]}
    out.update(change["put"])
    for key, (head, tail, middle) in change["list"].items():
        old = start[key]
        out[key] = [*old[:head], *middle, *old[len(old) - tail :]]
    return out


def _list_difference(before: list[Any], value: list[Any]) -> list[Any]:
    """How many entries stay at the head and at the tail, and what stands between them."""
    most = min(len(before), len(value))
    head = next((i for i in range(most) if not _same(before[i], value[i])), most)
    rest = most - head
    tail = next((i for i in range(rest) if not _same(before[-1 - i], value[-1 - i])), rest)
    return [head, tail, value[head : len(value) - tail]]


def _same(a: Any, b: Any) -> bool:
    """Shared tables are the same without a look inside."""
    return a is b or bool(a == b)

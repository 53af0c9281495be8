"""Writes a design's tables into the text of its TOML file; comments and order stay."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import tomlkit
from tomlkit.items import AoT, InlineTable, Table

__all__ = ["updated_toml"]


def updated_toml(text: str, data: Mapping[str, Any]) -> str:
    """The text of a TOML file with `data` in it.

    Parameters
    ----------
    text : str
        The file as it is; empty for a new one.
    data : mapping
        Plain tables, lists, texts, numbers and booleans.

    Returns
    -------
    str
        Reads back as `data`. What did not change keeps its comments and its layout.
    """
    document = tomlkit.parse(text)
    _update(document, data)
    return tomlkit.dumps(document)


def _update(table: Any, data: Mapping[str, Any]) -> None:
    for key in [k for k in table if k not in data]:
        del table[key]
    for key, value in data.items():
        if key in table:
            old = table[key]
            if _plain(old) == value and _same_kinds(_plain(old), value):
                continue
            if isinstance(value, Mapping) and isinstance(old, Table | InlineTable):
                _update(old, value)
                continue
            if isinstance(old, AoT) and _is_tables(value):
                _update_tables(old, value)
                continue
            if isinstance(old, AoT | Table):
                del table[key]  # a table cannot turn into a value in its place
        table[key] = _item(value)


def _update_tables(old: AoT, values: Sequence[Mapping[str, Any]]) -> None:
    while len(old) > len(values):
        del old[_first_difference(old, values)]
    for i, value in enumerate(values):
        if i < len(old):
            if _plain(old[i]) != value:
                _update(old[i], value)
        else:
            old.append(_item(value))


def _first_difference(old: AoT, values: Sequence[Mapping[str, Any]]) -> int:
    """The entry that was taken out: the first that is not where it was."""
    for i, value in enumerate(values):
        if _plain(old[i]) != value:
            return i
    return len(old) - 1


def _is_tables(value: Any) -> bool:
    return isinstance(value, list) and bool(value) and all(isinstance(v, Mapping) for v in value)


def _plain(item: Any) -> Any:
    return item.unwrap() if hasattr(item, "unwrap") else item


def _same_kinds(a: Any, b: Any) -> bool:
    """Equal values of equal types; 1 and True are equal, and are not the same in a file."""
    if isinstance(a, dict):
        return all(_same_kinds(a[k], b[k]) for k in a)
    if isinstance(a, list):
        return all(_same_kinds(x, y) for x, y in zip(a, b, strict=True))
    return isinstance(a, bool) == isinstance(b, bool)


def _item(value: Any) -> Any:
    if isinstance(value, Mapping):
        table = tomlkit.table()
        for key, inner in value.items():
            table.add(key, _item(inner))
        return table
    if _is_tables(value):
        tables = tomlkit.aot()
        for inner in value:
            tables.append(_item(inner))
        return tables
    return tomlkit.item(value)

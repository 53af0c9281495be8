"""Reads a TOML file and checks it against a shipped JSON Schema, in words that name the key."""

from __future__ import annotations

import difflib
import json
import math
import tomllib
from collections.abc import Iterator, Mapping
from functools import cache
from importlib.resources import files
from pathlib import Path
from typing import TYPE_CHECKING, Any

from voxelmat.errors import FileFormatError, InputError, ResourceError

if TYPE_CHECKING:
    from jsonschema import ValidationError

__all__ = ["check_document", "dotted", "load_schema", "read_toml"]

_LARGEST = 16 * 2**20  # bytes; a TOML file beyond this is not one that a person wrote

_KINDS = {
    "object": "a table",
    "array": "a list",
    "string": "text",
    "number": "a number",
    "integer": "a whole number",
    "boolean": "true or false",
}


def read_toml(path: Path) -> dict[str, Any]:
    """Parse a TOML file.

    Raises
    ------
    InputError
        If there is no such file.
    FileFormatError
        If it is not TOML in UTF-8 (the place is named), or is unreasonably large.
    ResourceError
        If it cannot be read.
    """
    try:
        size = path.stat().st_size
        raw = path.read_bytes() if size <= _LARGEST else b""
    except FileNotFoundError:
        raise InputError("There is no such file; check the path.", file=str(path)) from None
    except IsADirectoryError:
        raise InputError("This is a folder; give a TOML file.", file=str(path)) from None
    except OSError as error:
        raise ResourceError(f"{path} cannot be read: {error.strerror}.") from None
    if size > _LARGEST:
        raise FileFormatError(f"{path} has {size:,} bytes; a TOML file here has at most 16 MiB.")
    try:
        return tomllib.loads(raw.decode("utf-8"))
    except UnicodeDecodeError as error:
        raise FileFormatError(
            f"{path} is not UTF-8 text (byte {error.start}); save it as UTF-8."
        ) from None
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        raise FileFormatError(f"{path} is not valid TOML: {error}.") from None


@cache
def load_schema(name: str) -> dict[str, Any]:
    """The shipped JSON Schema of that name, for example ``"material"``."""
    text = files("voxelmat.io").joinpath("schemas").joinpath(f"{name}.json").read_text("utf-8")
    schema: dict[str, Any] = json.loads(text)
    return schema


def dotted(path: Iterator[str | int] | list[str | int] | tuple[str | int, ...]) -> str:
    """A key as people write it.

    Examples
    --------
    >>> dotted(["load_case", 0, "support", 1, "region"])
    'load_case[0].support[1].region'
    """
    text = ""
    for step in path:
        text += f"[{step}]" if isinstance(step, int) else f".{step}" if text else str(step)
    return text


def _not_finite(value: object, path: tuple[str | int, ...] = ()) -> Iterator[str]:
    if isinstance(value, Mapping):
        for key, item in value.items():
            yield from _not_finite(item, (*path, key))
    elif isinstance(value, list):
        for index, item in enumerate(value):
            yield from _not_finite(item, (*path, index))
    elif isinstance(value, float) and not math.isfinite(value):
        yield dotted(path)


def _short(value: object) -> str:
    text = repr(value)
    return text if len(text) <= 60 else text[:57] + "..."


def _words(error: ValidationError) -> tuple[str, str]:
    """The key and the sentence for one finding of the schema."""
    path = list(error.absolute_path)
    rule = error.validator
    limit: Any = error.validator_value
    given: Any = error.instance
    hint = str(error.schema.get("description", "")) if isinstance(error.schema, Mapping) else ""
    if rule == "additionalProperties" and isinstance(error.schema, Mapping):
        known = list(error.schema.get("properties", {}))
        wrong = sorted(k for k in given if k not in known)
        near = difflib.get_close_matches(wrong[0], known, n=1, cutoff=0.4)
        tip = f"Did you mean '{near[0]}'? " if near else ""
        return dotted([*path, wrong[0]]), f"This key is not known. {tip}Known: {', '.join(known)}."
    if rule == "required":
        lacking = [k for k in limit if k not in given]
        return dotted([*path, lacking[0]]), "This key is missing and has no default."
    said = {
        "exclusiveMinimum": f"must be above {limit}",
        "exclusiveMaximum": f"must be below {limit}",
        "minimum": f"must be at least {limit}",
        "maximum": f"must be at most {limit}",
        "enum": f"must be one of {', '.join(map(str, limit)) if isinstance(limit, list) else ''}",
        "const": f"must be {limit!r}",
        "type": f"must be {_KINDS.get(str(limit), str(limit))}",
        "pattern": "is not written as it should be",
        "minLength": "must not be empty",
        "minItems": f"needs at least {limit} values",
        "maxItems": f"takes at most {limit} values",
    }.get(str(rule), error.message)
    return dotted(path), f"The value {said}; got {_short(given)}. {hint}".rstrip()


def check_document(document: Mapping[str, Any], schema: str, *, file: str) -> None:
    """Check parsed data against a shipped schema.

    Parameters
    ----------
    document : mapping
        As read from TOML or JSON.
    schema : str
        Name of the schema.
    file : str
        Said in errors.

    Raises
    ------
    InputError
        For the first finding: unknown keys (with the nearest known one), then missing keys,
        then values; names file and key.
    """
    from jsonschema import Draft202012Validator

    for key in _not_finite(document):
        raise InputError("The value must be finite; got nan or infinity.", file=file, key=key)
    found = list(Draft202012Validator(load_schema(schema)).iter_errors(document))
    if not found:
        return
    order = {"additionalProperties": 0, "required": 1}
    found.sort(key=lambda e: (order.get(str(e.validator), 2), len(e.absolute_path), str(e.path)))
    key, text = _words(found[0])
    raise InputError(text, file=file, key=key or None)

"""What a section of the workbench shows, as plain data that the screen draws and reads aloud."""

from __future__ import annotations

import base64
from collections.abc import Sequence
from typing import Any

__all__ = [
    "Control",
    "button",
    "choice",
    "file_drop",
    "group",
    "heading",
    "html",
    "number_box",
    "picture",
    "progress",
    "slider",
    "table",
    "text_box",
    "toggle",
    "vector_box",
    "words",
]

#: Plain data: ``kind``, ``id`` where something can be done, and what the kind needs.
Control = dict[str, Any]


def heading(text: str) -> Control:
    """A title within a section."""
    return {"kind": "heading", "text": text}


def words(text: str, *, tone: str = "plain") -> Control:
    """A paragraph; `tone` is ``"plain"``, ``"hint"``, ``"warn"`` or ``"bad"``."""
    return {"kind": "words", "text": text, "tone": tone}


def html(text: str) -> Control:
    """Markup of our own making (a table of ours); never text that a user gave, unescaped."""
    return {"kind": "html", "html": text}


def number_box(
    name: str,
    label: str,
    value: float | None,
    unit: str = "",
    *,
    step: float | None = None,
    hint: str = "",
    disabled: bool = False,
) -> Control:
    """A number with its unit; the new value reaches ``act(name, value)`` as a float.

    What is no number reaches it as the text that was typed, so that the message names it.
    """
    return {
        "kind": "number", "id": name, "label": label, "value": value, "unit": unit,
        "step": step, "hint": hint, "disabled": disabled,
    }  # fmt: skip


def vector_box(name: str, label: str, value: Sequence[float | None], unit: str = "") -> Control:
    """Three numbers along x, y, z; ``act(name, [x, y, z])``; None for an empty box."""
    return {"kind": "vector", "id": name, "label": label, "value": list(value), "unit": unit}


def text_box(name: str, label: str, value: str, *, hint: str = "") -> Control:
    """One line of text; ``act(name, text)``."""
    return {"kind": "text", "id": name, "label": label, "value": value, "hint": hint}


def choice(
    name: str, label: str, value: str, options: Sequence[str], *, disabled: bool = False
) -> Control:
    """One of some options; ``act(name, option)``."""
    return {
        "kind": "choice", "id": name, "label": label, "value": value,
        "options": list(options), "disabled": disabled,
    }  # fmt: skip


def toggle(name: str, label: str, value: bool) -> Control:
    """On or off; ``act(name, bool)``."""
    return {"kind": "toggle", "id": name, "label": label, "value": value}


def slider(
    name: str,
    label: str,
    value: float,
    low: float,
    high: float,
    step: float,
    unit: str = "",
    *,
    colour: str = "",
) -> Control:
    """A slider with a number beside it; ``act(name, float)``, moves in between are dropped."""
    return {
        "kind": "slider", "id": name, "label": label, "value": value, "low": low, "high": high,
        "step": step, "unit": unit, "colour": colour,
    }  # fmt: skip


def button(
    name: str, label: str, *, main: bool = False, disabled: bool = False, why: str = ""
) -> Control:
    """Something to do; ``act(name, None)``. `why` says what a disabled one waits for."""
    return {
        "kind": "button", "id": name, "label": label, "main": main, "disabled": disabled,
        "why": why,
    }  # fmt: skip


def group(*controls: Control) -> Control:
    """Controls side by side."""
    return {"kind": "group", "controls": list(controls)}


def table(
    head: Sequence[str],
    rows: Sequence[Sequence[str]],
    *,
    caption: str,
    name: str = "",
    actions: Sequence[str] = (),
    colours: Sequence[str] | None = None,
    chosen: int | None = None,
) -> Control:
    """A table of texts; numbers are drawn to the right.

    With `actions` each row has these buttons, and ``act(name, [action, row])`` follows; with a
    `name` alone a row can be chosen: ``act(name, ["choose", row])``. `colours`, one a row,
    draws a swatch before the first cell.
    """
    return {
        "kind": "table", "id": name, "head": list(head), "rows": [list(r) for r in rows],
        "caption": caption, "actions": list(actions),
        "colours": list(colours) if colours is not None else None, "chosen": chosen,
    }  # fmt: skip


def picture(data: bytes, alt: str, *, name: str = "", width: int = 0) -> Control:
    """A PNG or JPEG; with a `name` a click reaches ``act(name, [x, y])``, shares of its size."""
    kind = "png" if data[:4] == b"\x89PNG" else "jpeg"
    url = f"data:image/{kind};base64,{base64.b64encode(data).decode()}"
    return {"kind": "picture", "id": name, "url": url, "alt": alt, "width": width}


def progress(label: str, done: int, total: int, text: str = "") -> Control:
    """A bar; without an end where `total` is 0."""
    return {"kind": "progress", "label": label, "done": done, "total": total, "text": text}


def file_drop(name: str, label: str, accept: str) -> Control:
    """A place to drop or pick a file; ``act(name, (file name, bytes))``."""
    return {"kind": "file", "id": name, "label": label, "accept": accept}

"""The scripts and the style sheet of the views, read from the package's own files."""

from __future__ import annotations

from html import escape
from importlib.resources import files

import ipywidgets

__all__ = ["notice", "script", "style"]


def _text(name: str) -> str:
    return (files("voxelmat.workbench") / "static" / name).read_text("utf-8")


def script(*names: str) -> str:
    """One view's script, from one file or more, with the pieces that all share before it."""
    return "".join(map(_text, ("helpers.js", *names)))


def style(*more: str) -> str:
    """The style sheet of all views, and what one view needs besides."""
    return "".join(map(_text, ("views.css", *more)))


def notice(text: str) -> ipywidgets.Widget:
    """A paragraph in the look of the views."""
    return ipywidgets.HTML(f"<style>{style()}</style><p class='vm'>{escape(text)}</p>")

"""One section of the workbench: what it shows, what a click does, and the line of code for it."""

from __future__ import annotations

from abc import ABC, abstractmethod
from typing import TYPE_CHECKING, Any

from voxelmat.errors import InputError
from voxelmat.workbench.controls import Control

if TYPE_CHECKING:
    from voxelmat.workbench.bench import Workbench

__all__ = ["Section", "code_of", "number_from"]


class Section(ABC):
    """A tab on the right of the screen and the verbs behind it.

    Public methods are the verbs: a script calls ``bench.loads.set_force(...)``, and a click does
    the same through `call`, which notes that very line.

    Attributes
    ----------
    name : str
        Under which the bench holds it: ``bench.loads``.
    title : str
        On the tab.
    """

    name: str
    title: str

    def __init__(self, bench: Workbench) -> None:
        self.bench = bench

    @abstractmethod
    def controls(self) -> list[Control]:
        """What to show now."""

    @abstractmethod
    def act(self, name: str, value: Any) -> None:
        """Do what the control `name` asks for with its new `value`."""

    def design_changed(self) -> None:  # noqa: B027 (most sections keep nothing)
        """The design is another one now; drop what no longer holds. Called under no lock."""

    def opened(self) -> None:  # noqa: B027 (most sections do nothing)
        """The screen is up; start what is to run from the beginning."""

    def call(self, verb: str, **values: Any) -> Any:
        """Call one of the section's own verbs and note its line of code."""
        return self.bench.noted(
            f"bench.{self.name}.{code_of(verb, values)}", lambda: getattr(self, verb)(**values)
        )


def code_of(verb: str, values: dict[str, Any]) -> str:
    """A call as a line of Python."""
    return f"{verb}({', '.join(f'{k}={_literal(v)}' for k, v in values.items())})"


def _literal(value: Any) -> str:
    if isinstance(value, float):
        return repr(round(value, 9))
    if isinstance(value, dict):
        return "{" + ", ".join(f"{k!r}: {_literal(v)}" for k, v in value.items()) + "}"
    if isinstance(value, list | tuple):
        inner = ", ".join(_literal(v) for v in value)
        return f"[{inner}]" if isinstance(value, list) else f"({inner},)"
    return repr(value)


def number_from(value: Any, what: str, unit: str = "") -> float:
    """A finite number from a control, or an `InputError` that names what was typed."""
    try:
        if isinstance(value, bool):
            raise TypeError
        number = float(value)
        if number - number != 0:
            raise ValueError
    except (TypeError, ValueError):
        given = "nothing" if value in (None, "") else f"'{value}'"
        raise InputError(
            f"{what} takes a number{f' in {unit}' if unit else ''}; got {given}."
        ) from None
    return number

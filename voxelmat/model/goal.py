"""What is wanted of a measure: least, greatest, at most, at least."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError

__all__ = ["AtLeast", "AtMost", "Maximise", "Minimise", "plain"]


def _measure(value: object, where: str) -> None:
    if isinstance(value, type) or not dataclasses.is_dataclass(value):
        raise InputError(
            f"{where} takes a measure, such as Mass() or Displacement(...); got {value!r}."
        )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Minimise:
    """As little of a measure as the limits allow."""

    measure: object

    def __post_init__(self) -> None:
        _measure(self.measure, "Minimise")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Maximise:
    """As much of a measure as the limits allow."""

    measure: object

    def __post_init__(self) -> None:
        _measure(self.measure, "Maximise")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Limit:
    measure: object
    value: float
    scale: float | None = None

    def __post_init__(self) -> None:
        _measure(self.measure, type(self).__name__)
        if not math.isfinite(self.value):
            raise InputError(f"A limit must be a finite number; got {self.value!r}.")
        if self.scale is not None and not (math.isfinite(self.scale) and self.scale > 0):
            raise InputError(f"The scale of a limit must be above 0; got {self.scale!r}.")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class AtMost(_Limit):
    """A measure that must not exceed a value.

    Attributes
    ----------
    measure : a measure
    value : float
        In the measure's unit.
    scale : float or None
        By how much a violation counts as all of it; the size of the value where left out, so
        needed where the value is 0.
    """


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class AtLeast(_Limit):
    """A measure that must not fall below a value; attributes as for `AtMost`."""


def plain(value: object, arrays: list[NDArray[Any]]) -> Any:
    """Anything that a specification holds as text-like data, its arrays appended to a list.

    Two specifications are the same where both are: this is what a digest is made of.
    """
    if isinstance(value, np.ndarray):
        arrays.append(value)
        return list(value.shape)
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        names = [f.name for f in dataclasses.fields(value)]
        return [type(value).__name__, {n: plain(getattr(value, n), arrays) for n in names}]
    if isinstance(value, Mapping):
        return {str(key): plain(entry, arrays) for key, entry in value.items()}
    if isinstance(value, tuple | list):
        return [plain(entry, arrays) for entry in value]
    if callable(value):  # the point test of a mesh; its address differs from run to run
        return getattr(value, "__qualname__", type(value).__name__)
    return repr(value)

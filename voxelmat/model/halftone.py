"""How blends become droplets: method, order of laying, and how sharp interfaces are."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from voxelmat.errors import InputError

__all__ = ["METHODS", "ORDERS", "Halftone"]

#: Blue noise is the choice for parts; error diffusion has less noise but is serial; hash noise is
#: white and for comparison.
METHODS = ("blue noise", "error diffusion", "hash noise")
#: Orders of laying that have a name.
ORDERS = ("stiffness", "channels")

Widths = tuple[tuple[tuple[str, str], float], ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Halftone:
    """The halftone of a print job.

    Attributes
    ----------
    method : str
        One of `METHODS`. Error diffusion runs on one core, from the lowest layer up, and keeps 4
        bytes a resin and site of a layer's window in memory.
    order : str or tuple of str
        In which order the thresholds lay the resins. The first and the last get the least
        noise, a resin between two others the noise of two thresholds. ``"stiffness"`` goes from
        the stiffest to the softest, ``"channels"`` keeps the order of the channels; or resin
        names, first to last.
    interface_width_mm : float, or mapping from pairs of resin names to float
        Over which width two pure zones that touch are dithered into each other, centred on
        their interface, mm; one width for all pairs, or a width for each pair that has one. 0
        is hard, and so is a width below one droplet site.
    """

    method: str = "blue noise"
    order: str | tuple[str, ...] = "stiffness"
    interface_width_mm: float | Mapping[tuple[str, str], float] | Widths = 0.0

    def __post_init__(self) -> None:
        if self.method not in METHODS:
            raise InputError(
                f"A halftone method is one of {', '.join(METHODS)}; got {self.method!r}.",
                key="halftone",
            )
        if isinstance(self.order, str):
            if self.order not in ORDERS:
                raise InputError(
                    f"The order of laying is one of {', '.join(ORDERS)}, or a tuple of resin "
                    f"names; got {self.order!r}.",
                    key="order",
                )
        else:
            object.__setattr__(self, "order", tuple(self.order))
        object.__setattr__(self, "interface_width_mm", _widths(self.interface_width_mm))

    def width_between(self, one: str, other: str) -> float:
        """Width over which two resins are dithered into each other, mm; 0 for a hard interface."""
        widths = self._widths
        return widths if isinstance(widths, float) else dict(widths).get(_sorted(one, other), 0.0)

    @property
    def _widths(self) -> float | Widths:
        """As checked when the object was made."""
        return self.interface_width_mm  # type: ignore[return-value]

    @property
    def has_widths(self) -> bool:
        """True where some interface may be dithered."""
        return self.widest_mm > 0

    @property
    def widest_mm(self) -> float:
        """The greatest interface width, mm."""
        widths = self._widths
        return widths if isinstance(widths, float) else max((w for _, w in widths), default=0.0)

    @property
    def width_names(self) -> tuple[str, ...]:
        """Resins that a width is given for by name."""
        widths = self._widths
        pairs = () if isinstance(widths, float) else widths
        return tuple(sorted({name for pair, _ in pairs for name in pair}))

    @property
    def is_serial(self) -> bool:
        """True where a layer needs those below it, so that the work cannot be shared out."""
        return self.method == "error diffusion"

    def as_dict(self) -> dict[str, Any]:
        """Plain data; pairs as ``"a | b"``."""
        widths: Any = self._widths
        if not isinstance(widths, float):
            widths = {" | ".join(pair): width for pair, width in widths}
        order = self.order if isinstance(self.order, str) else list(self.order)
        return {"method": self.method, "order": order, "interface_width_mm": widths}

    @classmethod
    def from_dict(cls, data: Mapping[str, Any]) -> Halftone:
        """The inverse of `as_dict`; what is left out is as by default."""
        fields = dict(data)
        widths = fields.get("interface_width_mm", 0.0)
        if isinstance(widths, Mapping):
            fields["interface_width_mm"] = {
                tuple(pair.split(" | ")): width for pair, width in widths.items()
            }
        if isinstance(fields.get("order"), list):
            fields["order"] = tuple(fields["order"])
        return cls(**fields)


def _sorted(one: str, other: str) -> tuple[str, str]:
    return (one, other) if one <= other else (other, one)


def _widths(given: Any) -> float | Widths:
    """One width, or pairs in ascending order with theirs; refuse what is neither."""
    if isinstance(given, int | float) and not isinstance(given, bool):
        return _checked(given, "every interface")
    try:
        items = [(tuple(pair), width) for pair, width in dict(given).items()]
    except (TypeError, ValueError):
        items = [((), 0.0)]
    out: dict[tuple[str, str], float] = {}
    for pair, width in items:
        if len(pair) != 2 or not all(isinstance(n, str) for n in pair) or pair[0] == pair[1]:
            raise InputError(
                "An interface width is one number, mm, or a mapping from two resin names to a "
                f"number; got {given!r}.",
                key="interface_width_mm",
            )
        key = _sorted(*pair)
        if key in out:
            raise InputError(
                f"The interface of '{key[0]}' and '{key[1]}' has two widths.",
                key="interface_width_mm",
            )
        out[key] = _checked(width, f"'{key[0]}' on '{key[1]}'")
    return tuple(sorted(out.items()))


def _checked(width: Any, what: str) -> float:
    number = isinstance(width, int | float) and not isinstance(width, bool)
    if not number or not math.isfinite(width) or width < 0:
        raise InputError(
            f"The width of {what} must be a finite number of mm, 0 or more; got {width!r}.",
            key="interface_width_mm",
        )
    return float(width)

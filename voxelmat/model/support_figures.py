"""How support is made: the policies, and the sizes that the drawn ones take."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from voxelmat.errors import InputError

__all__ = ["DRAWN_SUPPORT", "SUPPORT_POLICIES", "SupportFigures"]

#: "columns" is solid from every overhang down to the tray. "grid" is a grid of walls there, under
#: a solid interface layer. "skin" is a thin skin beside and below the part and nothing else.
#: "machine" leaves support to the printer, which adds it unseen by us; "none" prints none.
SUPPORT_POLICIES = ("columns", "grid", "skin", "machine", "none")
#: Policies that fill a channel of the stack.
DRAWN_SUPPORT = ("columns", "grid", "skin")


@dataclass(frozen=True, slots=True, kw_only=True)
class SupportFigures:
    """Sizes of drawn support, mm. The defaults are ours.

    Attributes
    ----------
    grid_pitch, grid_wall : float
        Distance between the middles of neighbouring walls of a grid, and their thickness.
    interface : float
        Thickness of the solid layer between a grid and the part above it.
    skin : float
        Thickness of a skin.
    """

    grid_pitch: float = 2.0
    grid_wall: float = 0.5
    interface: float = 0.6
    skin: float = 0.5

    def __post_init__(self) -> None:
        for name, value in dataclasses.asdict(self).items():
            if not (math.isfinite(value) and 0 < value <= 100):
                raise InputError(
                    f"A size of the support must be above 0 and at most 100 mm; got {value}.",
                    key=f"support.{name}_mm",
                )
        if self.grid_wall >= self.grid_pitch:
            raise InputError(
                f"Walls of {self.grid_wall:g} mm leave no room at a pitch of "
                f"{self.grid_pitch:g} mm; take a larger pitch, or the policy 'columns'.",
                key="support.grid_pitch_mm",
            )

    def as_dict(self) -> dict[str, float]:
        """Plain data for the ``support`` table of a profile file."""
        return {f"{k}_mm": float(v) for k, v in dataclasses.asdict(self).items()}

    @classmethod
    def keys(cls) -> tuple[str, ...]:
        """The keys of `as_dict`."""
        return tuple(f"{f.name}_mm" for f in dataclasses.fields(cls))

    @classmethod
    def from_dict(cls, data: Mapping[str, Any]) -> SupportFigures:
        """From the keys of `as_dict`, any of which may be left out.

        Raises
        ------
        InputError
            If a value is no number or out of range, naming its key.
        """
        given = {k: v for k, v in data.items() if k in set(cls.keys())}
        for key, value in given.items():
            if isinstance(value, bool) or not isinstance(value, int | float):
                raise InputError(f"A size in mm is a number; got {value!r}.", key=f"support.{key}")
        return cls(**{k.removesuffix("_mm"): float(v) for k, v in given.items()})

"""How a part in space is looked at: where it is cut, what is hidden or a ghost; plain values."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

from voxelmat.errors import InputError

__all__ = ["SEEN", "Look"]

#: What can be done with a material or a body in the picture.
SEEN = ("shown", "ghost", "hidden")


@dataclass(frozen=True, slots=True, kw_only=True)
class Look:
    """What of a part is drawn.

    Attributes
    ----------
    axis : str
        Across which the cutting plane lies: ``"x"``, ``"y"`` or ``"z"``.
    share : float
        Where the plane lies, 0 to 1 of the box along `axis`.
    above : bool
        True takes away what lies above the plane, False what lies below it.
    hidden, ghosted : frozenset of str
        Names of materials, blends and bodies that are not drawn, or drawn translucent.
    """

    axis: str = "y"
    share: float = 0.0
    above: bool = False
    hidden: frozenset[str] = frozenset()
    ghosted: frozenset[str] = frozenset()

    def __post_init__(self) -> None:
        if self.axis not in ("x", "y", "z"):
            raise InputError(f"A cut lies across x, y or z; got {self.axis!r}.")
        share = float(self.share)
        if share != share:
            raise InputError("The place of a cut is a share of the box, 0 to 1; got no number.")
        object.__setattr__(self, "share", min(max(share, 0.0), 1.0))

    @property
    def cuts(self) -> bool:
        """Whether anything is cut away."""
        return self.share < 1.0 if self.above else self.share > 0.0

    def turned_over(self) -> Look:
        """The other side is cut away; where nothing is cut, nothing is cut afterwards."""
        if not self.cuts:
            return replace(self, above=not self.above, share=0.0 if self.above else 1.0)
        return replace(self, above=not self.above)

    def seen(self, name: str, how: str) -> Look:
        """With one material or body ``"shown"``, a ``"ghost"`` or ``"hidden"``."""
        if how not in SEEN:
            raise InputError(f"A material is {', '.join(SEEN)}; got {how!r}.")
        hidden, ghosted = self.hidden - {name}, self.ghosted - {name}
        if how == "hidden":
            hidden |= {name}
        elif how == "ghost":
            ghosted |= {name}
        return replace(self, hidden=hidden, ghosted=ghosted)

    def how(self, name: str) -> str:
        """How a material or body is seen."""
        return "hidden" if name in self.hidden else "ghost" if name in self.ghosted else "shown"

    def kept(self) -> dict[str, Any]:
        """As plain data that a draft keeps."""
        return {
            "cut": {"axis": self.axis, "share": self.share, "above": self.above},
            "hidden": sorted(self.hidden),
            "ghosted": sorted(self.ghosted),
        }

    @classmethod
    def of(cls, view: Mapping[str, Any]) -> Look:
        """From what a draft keeps; what is missing or broken there is left at its start."""
        try:
            cut = dict(view.get("cut", {}))
            return cls(
                axis=str(cut.get("axis", "y")),
                share=float(cut.get("share", 0.0)),
                above=bool(cut.get("above", False)),
                hidden=frozenset(map(str, view.get("hidden", ()))),
                ghosted=frozenset(map(str, view.get("ghosted", ()))),
            )
        except (InputError, TypeError, ValueError):
            return cls()

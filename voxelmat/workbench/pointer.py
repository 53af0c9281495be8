"""Places that were clicked on a picture: what is there in words, and the distance of two."""

from __future__ import annotations

from typing import Any

import numpy as np

from voxelmat.units import number
from voxelmat.workbench.captions import Line
from voxelmat.workbench.picking import Hit
from voxelmat.workbench.shown import Shown

__all__ = ["Pointer"]


class Pointer:
    """The last place that was clicked, or with `measuring` the last two.

    Attributes
    ----------
    measuring : bool
    hits : list of Hit
    """

    def __init__(self) -> None:
        self.measuring = False
        self.hits: list[Hit] = []

    def add(self, hit: Hit) -> None:
        """Take note of a place; a third one begins anew."""
        more = self.measuring and len(self.hits) < 2
        self.hits = [*self.hits, hit] if more else [hit]

    @property
    def distance(self) -> tuple[float, tuple[float, float, float]] | None:
        """Distance of two measured places before the part deforms, mm, and along x, y, z."""
        if not self.measuring or len(self.hits) < 2:
            return None
        first, second = (np.array(h.place_mm) for h in self.hits)
        dx, dy, dz = map(float, second - first)
        return float(np.linalg.norm(second - first)), (dx, dy, dz)

    def ruler(self, shown: Shown) -> Line | None:
        """The marks to draw, where the places are drawn now."""
        if not self.hits:
            return None
        moved = shown.solid.moved(np.array([h.place_mm for h in self.hits]))
        far = self.distance
        return Line(
            places=tuple(tuple(map(float, p)) for p in moved),
            text="" if far is None else f"{number(far[0])} mm",
        )

    def words(self, shown: Shown, facts: dict[str, Any]) -> str:
        """The last place in words, after the distance where two are measured."""
        hit = self.hits[-1]
        at = ", ".join(number(v) for v in hit.place_mm)
        body = f", body {facts['body']}" if facts["body"] else ""
        fields = "".join(f"; {words}" for words in shown.words_at(hit.voxel))
        text = f"At {at} mm: {facts['material']}{body}{fields}."
        far = self.distance
        if far is not None:
            dx, dy, dz = map(number, far[1])
            before = " before it deforms" if shown.factor else ""
            return f"Distance {number(far[0])} mm{before}: x {dx}, y {dy}, z {dz} mm. {text}"
        return f"{text} Click the second place." if self.measuring else text

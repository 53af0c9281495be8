"""Keeps the last voxelised shapes, so that an edit of loads or material voxelises nothing again."""

from __future__ import annotations

import threading
from collections import OrderedDict
from collections.abc import Callable
from typing import NamedTuple

from voxelmat.model.design import Design
from voxelmat.provenance import text_digest
from voxelmat.shape.assemble import Assembly

__all__ = ["ShapeCache", "Shaped"]

#: Shapes that are kept: the full one and the coarse one of this design and of the last.
_MOST = 4


class Shaped(NamedTuple):
    """What voxelising found: the bodies on the grid, notes and cautions about their meshes."""

    assembly: Assembly
    notes: tuple[str, ...]
    cautions: tuple[str, ...]


class ShapeCache:
    """Voxelised shapes by what they were made from; safe to use from threads."""

    def __init__(self) -> None:
        self._lock = threading.Lock()
        self._kept: OrderedDict[str, Shaped] = OrderedDict()

    def get(self, design: Design, make: Callable[[], Shaped]) -> Shaped:
        """The shape of a design, made where it is not kept."""
        key = text_digest(
            {
                "bodies": [repr(b) for b in design.bodies],
                "gaps": repr(design.gaps),
                "spacing": list(design.spacing_mm),
                "margin": design.margin_voxels,
                "meshes": {b.mesh: design.inputs.get(b.mesh, "") for b in design.bodies},
            }
        )
        with self._lock:
            if key in self._kept:
                self._kept.move_to_end(key)
                return self._kept[key]
        shaped = make()
        with self._lock:
            self._kept[key] = shaped
            while len(self._kept) > _MOST:
                self._kept.popitem(last=False)
        return shaped

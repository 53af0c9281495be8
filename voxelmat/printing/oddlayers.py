"""Layers that do not belong between their neighbours: blank, mirrored, cut off, swapped.

Judged on the solid of neighbouring layers: between two layers that agree, one that differs from
both is odd; and where two layers would fit better the other way round, they are swapped. Droplets
of a halftone play no part, because all resins count as one.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from voxelmat.kernels.layerdiff import count_difference
from voxelmat.model.finding import Finding
from voxelmat.printing.readback import Stack

__all__ = ["LayerDifferences", "odd_layer_findings"]

Plane = NDArray[np.uint64]
Bools = NDArray[np.bool_]
#: A layer is odd if its neighbours differ by less than `_AGREE` of what it differs from each, and
#: two layers are swapped if the other order has less than `_BETTER` of the differences; both only
#: above `_FEWEST` sites and `_SHARE` of the layer. All limits are ours.
_AGREE, _BETTER, _FEWEST, _SHARE = 0.3, 0.7, 24, 0.002
_NAMED = 3


@dataclass(slots=True)
class LayerDifferences:
    """Sites that differ between each layer and the one, and the two, before it.

    Attributes
    ----------
    area, one, two : list of int
        Solid sites of layer k; differences from layer k - 1 and from k - 2 (0 where there is none).
    """

    area: list[int] = field(default_factory=list)
    one: list[int] = field(default_factory=list)
    two: list[int] = field(default_factory=list)
    _before: list[Plane] = field(default_factory=list)

    def push(self, plane: Plane) -> None:
        """Take in the next layer's solid, words ``[rows, words]``."""
        self.area.append(int(count_difference(plane, np.zeros_like(plane))))
        for far, kept in ((1, self.one), (2, self.two)):
            known = len(self._before) >= far
            kept.append(int(count_difference(plane, self._before[-far])) if known else 0)
        self._before = [*self._before[-1:], plane]


def _floor(seen: LayerDifferences, k: int) -> float:
    return max(_FEWEST, _SHARE * seen.area[k])


def _odd(seen: LayerDifferences) -> list[int]:
    """Layers that differ from both neighbours, which agree."""
    last = len(seen.area) - 1
    return [
        k
        for k in range(1, last)
        if min(seen.one[k], seen.one[k + 1]) > _floor(seen, k - 1)
        and seen.two[k + 1] < _AGREE * min(seen.one[k], seen.one[k + 1])
    ]


def _swapped(seen: LayerDifferences) -> list[int]:
    """First layers of pairs that fit better the other way round."""
    found = []
    for k in range(1, len(seen.area) - 2):
        now = seen.one[k] + seen.one[k + 2]
        then = seen.two[k + 1] + seen.two[k + 2]
        if now > 2 * _floor(seen, k) and then < _BETTER * now and seen.one[k + 1] < now:
            found.append(k)
    return found


def odd_layer_findings(stack: Stack, seen: LayerDifferences) -> Iterator[Finding]:
    """A finding for each layer that does not belong where it is."""
    odd = _odd(seen)
    for k in odd[:_NAMED]:
        what = _described(stack, k)
        yield Finding(
            severity="stop",
            code="odd layer",
            message=f"Layer {k} {what}, while the layers below and above agree with each other "
            f"({len(odd)} such layers in all).",
            place_mm=_middle(stack, k),
            remedy="Write the stack again; a part this thin would be lost in any case.",
            value=k,
        )
    pairs = _swapped(seen)
    for k in pairs[:_NAMED]:
        yield Finding(
            severity="stop",
            code="layers swapped",
            message=f"Layers {k} and {k + 1} fit their neighbours better the other way round: "
            f"{seen.one[k] + seen.one[k + 2]} sites differ, swapped "
            f"{seen.two[k + 1] + seen.two[k + 2]} ({len(pairs)} such pairs in all).",
            place_mm=_middle(stack, k),
            remedy="Write the stack again.",
            value=k,
        )


def _middle(stack: Stack, layer: int) -> tuple[float, float, float]:
    """The middle of what is solid in the layer or, where nothing is, of the one below."""
    for k in (layer, max(layer - 1, 0)):
        at = np.argwhere(_solid(stack, k))
        if len(at):
            row, column = at[len(at) // 2]
            return stack.raster.pixel_to_part(layer, int(row), int(column))
    _, rows, columns = stack.raster.image_shape
    return stack.raster.pixel_to_part(layer, rows // 2, columns // 2)


def _solid(stack: Stack, layer: int) -> Bools:
    bits = stack.files.examine(layer).bits
    model = [m for m, c in enumerate(stack.channels) if c.role != "support"]
    plane = np.bitwise_or.reduce(bits[model], axis=0)
    width = stack.raster.image_shape[2]
    return np.unpackbits(plane, axis=1, count=width).astype(np.bool_)


def _described(stack: Stack, layer: int) -> str:
    """What is wrong with one odd layer, in words."""
    here, below = _solid(stack, layer), _solid(stack, layer - 1)
    if not here.any():
        return "is blank"
    off = int((here != below).sum())
    turns = {
        "is mirrored along its columns": here[:, ::-1],
        "is mirrored along its rows": here[::-1],
        "is turned by 180 degrees": here[::-1, ::-1],
    }
    left = {words: int((turned != below).sum()) for words, turned in turns.items()}
    best = min(left, key=left.__getitem__)
    if left[best] < _AGREE * off:
        return best
    rows = np.flatnonzero(here.any(axis=1))
    kept = int(rows[-1]) + 1
    if (
        kept < len(here)
        and below[kept:].any()
        and int((here[:kept] != below[:kept]).sum()) < _AGREE * off
    ):
        return f"ends after row {kept - 1}"
    return "differs from both neighbours"

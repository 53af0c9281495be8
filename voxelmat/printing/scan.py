"""One pass over a stack on disk that gathers every fact the preflight judges."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from voxelmat.kernels.bitplane import count_planes, first_site, lone_sites
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.bands import Band, split_rows
from voxelmat.printing.decoded import DecodedLayer, decoded_layers
from voxelmat.printing.layerdesign import ExpectedLayers
from voxelmat.printing.oddlayers import LayerDifferences
from voxelmat.printing.pieces import Piece, Pieces
from voxelmat.printing.readback import Stack
from voxelmat.printing.thin import ThinScreen

__all__ = ["Facts", "FirstSeen", "scan"]

Plane = NDArray[np.uint64]
Sites = tuple[int, int, int]
#: Bytes for the layers that the screens for thin features keep; more rows go in bands, each of
#: which reads the stack again.
_MEMORY = 256 << 20


@dataclass(slots=True)
class FirstSeen:
    """How many sites a check found, and the first: layer, row, column."""

    sites: int = 0
    place: tuple[int, int, int] | None = None

    def note(self, layer: int, plane: Plane, sites: int) -> None:
        """Take in the flagged sites of one layer."""
        if sites and self.place is None:
            row, column = first_site(plane)
            self.place = (layer, row, column)
        self.sites += sites


@dataclass(slots=True)
class Facts:
    """What one pass found; places are pixels, pieces are sorted by size."""

    sites: list[int]
    bad_files: list[tuple[int, int, str]] = field(default_factory=list)
    changed_files: list[tuple[int, int]] = field(default_factory=list)
    twice: FirstSeen = field(default_factory=FirstSeen)
    specks: FirstSeen = field(default_factory=FirstSeen)
    holes: FirstSeen = field(default_factory=FirstSeen)
    part: list[Piece] = field(default_factory=list)
    printed: list[Piece] = field(default_factory=list)
    hollows: list[Piece] = field(default_factory=list)
    walls: list[Piece] = field(default_factory=list)
    gaps: list[Piece] = field(default_factory=list)
    differences: LayerDifferences = field(default_factory=LayerDifferences)


class _Neighbours:
    """Sites that stand alone between the layers below and above."""

    def __init__(self, blank: Plane, valid: Plane, seen: FirstSeen) -> None:
        self._below = self._here = blank
        self._blank = blank
        self._valid = valid
        self._seen = seen
        self._layer = -1

    def push(self, above: Plane) -> None:
        if self._layer >= 0:
            out = np.empty_like(above)
            lone_sites(self._below, self._here, above, out)
            out &= self._valid
            self._seen.note(self._layer, out, _count(out))
        self._below, self._here = self._here, above
        self._layer += 1

    def finish(self) -> None:
        self.push(self._blank)


def _count(plane: Plane) -> int:
    total = np.zeros(1, dtype=np.int64)
    count_planes(plane[None], total)
    return int(total[0])


def _reach(kinds: tuple[Sites, Sites]) -> int:
    """Rows to either side that decide whether a site is thin."""
    return max(sites[1] // 2 - (-3 * sites[1] // 2) + 1 for sites in kinds)


class _Main:
    """Everything but thin features, layer by layer."""

    def __init__(self, stack: Stack) -> None:
        _, rows, width = stack.raster.image_shape
        words = (width + 63) // 64
        blank = np.zeros((rows, words), dtype=np.uint64)
        self._valid = np.full((rows, words), np.uint64(0xFFFFFFFFFFFFFFFF))
        self._valid[:, -1] = (2**64 - 1 << (words * 64 - width)) & (2**64 - 1)
        self.facts = Facts(sites=[])
        self._sites = np.zeros(len(stack.channels), dtype=np.int64)
        self._part, self._hollows = Pieces(rows, width), Pieces(rows, width)
        self._printed = None if stack.support_channel is None else Pieces(rows, width)
        self._alone = _Neighbours(blank, self._valid, self.facts.specks)
        self._holes = _Neighbours(~blank, self._valid, self.facts.holes)

    def push(self, k: int, layer: DecodedLayer, part: Plane) -> None:
        facts = self.facts
        facts.bad_files += [(k, c, text) for c, text in layer.bad]
        facts.changed_files += [(k, c) for c in layer.changed]
        count_planes(layer.planes, self._sites)
        printed, twice = layer.union(support=True)
        facts.twice.note(k, twice, _count(twice))
        if self._printed is not None:
            self._printed.add(printed)
        facts.differences.push(part)
        self._part.add(part)
        self._hollows.add(~part & self._valid)
        self._alone.push(part)
        self._holes.push(~part)

    def finish(self) -> Facts:
        self._hollows.add(self._valid)  # the open space above the last layer
        self._alone.finish()
        self._holes.finish()
        self.facts.sites = [int(n) for n in self._sites]
        self.facts.part = self._part.found()
        self.facts.printed = (self._printed or self._part).found()
        self.facts.hollows = self._hollows.found()
        return self.facts


def scan(
    stack: Stack,
    wall: Sites,
    gap: Sites,
    *,
    expected: Sequence[ExpectedLayers] = (),
    monitor: Monitor = SILENT,
) -> Facts:
    """Read every layer and gather the facts.

    Parameters
    ----------
    stack : Stack
    wall, gap : tuple of int
        Smallest wall and gap along layers, rows and columns, in sites.
    expected : sequence of ExpectedLayers
        Are shown every layer as well.
    monitor : Monitor

    Returns
    -------
    Facts
        A file that cannot be read counts as an empty image and is listed. Very large layers are
        screened for thin features in bands of rows; a feature across two bands is then listed
        in both.
    """
    _, rows, width = stack.raster.image_shape
    kinds = (wall, gap)
    bands = split_rows((rows, width), 7 * (wall[0] + gap[0]), _reach(kinds), _MEMORY)

    def screens(height: int) -> list[ThinScreen]:
        return [
            ThinScreen(height, width, sites, solid=solid)
            for sites, solid in zip(kinds, (True, False), strict=True)
        ]

    main = _Main(stack)
    total = stack.n_layers * len(bands)
    thin: list[list[list[Piece]]] = []
    for number, inner in enumerate(bands):
        band = Band(inner, (rows, width), _reach(kinds), screens)
        for k, layer in enumerate(decoded_layers(stack)):
            part, _ = layer.union(support=False)
            if number == 0:
                main.push(k, layer, part)
                for each in expected:
                    each.push(k, layer.planes)
            band.push(part)
            done = number * stack.n_layers + k + 1
            monitor.report("checking layers", done=done, total=total)
        thin.append(band.found())
    facts = main.finish()
    facts.walls, facts.gaps = (
        sorted((p for found in thin for p in found[kind]), key=lambda p: -p.sites)
        for kind in range(2)
    )
    return facts

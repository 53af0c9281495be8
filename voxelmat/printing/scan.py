"""One pass over a stack on disk that gathers every fact the preflight judges."""

from __future__ import annotations

from collections import deque
from collections.abc import Iterator
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import FileFormatError
from voxelmat.kernels.bitplane import claims, count_planes, first_site, lone_sites, to_words
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.pieces import Piece, Pieces
from voxelmat.printing.readback import Stack
from voxelmat.printing.thin import ThinScreen

__all__ = ["Facts", "FirstSeen", "scan"]

Plane = NDArray[np.uint64]
_AHEAD = 4  # layers that are read and decoded while earlier ones are looked at


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


@dataclass(slots=True)
class _Layer:
    """One decoded layer as words ``[channel, row, word]``, with what was wrong with its files."""

    planes: Plane
    bad: list[tuple[int, str]]
    changed: list[int]


def _read(stack: Stack, layer: int) -> _Layer:
    _, rows, width = stack.raster.image_shape
    planes = np.zeros((len(stack.channels), rows, (width + 63) // 64), dtype=np.uint64)
    found = _Layer(planes, [], [])
    for channel in range(len(stack.channels)):
        try:
            data = stack.file_bytes(channel, layer)
            if not stack.is_intact(channel, layer, data):
                found.changed.append(channel)
            to_words(stack.decode(channel, layer, data), planes[channel])
        except FileFormatError as error:
            found.bad.append((channel, str(error)))
    return found


def _layers(stack: Stack) -> Iterator[_Layer]:
    """Decoded layers from the tray upwards, a few read ahead."""
    with ThreadPoolExecutor(1, thread_name_prefix="voxelmat-read") as pool:
        waiting: deque[Future[_Layer]] = deque()
        for layer in range(stack.n_layers):
            waiting.append(pool.submit(_read, stack, layer))
            if len(waiting) > _AHEAD:
                yield waiting.popleft().result()
        while waiting:
            yield waiting.popleft().result()


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


class _Thin:
    """Thin sites of one kind, gathered into pieces."""

    def __init__(self, rows: int, width: int, sites: tuple[int, int, int], solid: bool) -> None:
        self._screen = ThinScreen(rows, width, sites, solid=solid)
        self._pieces = Pieces(rows, width)

    def push(self, plane: Plane) -> None:
        thin = self._screen.push(plane)
        if thin is not None:
            self._pieces.add(thin)

    def found(self) -> list[Piece]:
        for thin in self._screen.finish():
            self._pieces.add(thin)
        return self._pieces.found()


def scan(
    stack: Stack,
    wall: tuple[int, int, int],
    gap: tuple[int, int, int],
    *,
    monitor: Monitor = SILENT,
) -> Facts:
    """Read every layer once and gather the facts.

    Parameters
    ----------
    stack : Stack
    wall, gap : tuple of int
        Smallest wall and gap along layers, rows and columns, in sites.
    monitor : Monitor

    Returns
    -------
    Facts
        A file that cannot be read counts as an empty image and is listed.
    """
    _, rows, width = stack.raster.image_shape
    words = (width + 63) // 64
    blank = np.zeros((rows, words), dtype=np.uint64)
    valid = np.full((rows, words), np.uint64(0xFFFFFFFFFFFFFFFF))
    valid[:, -1] = (2**64 - 1 << (words * 64 - width)) & (2**64 - 1)
    facts = Facts(sites=[0] * len(stack.channels))
    sites = np.zeros(len(stack.channels), dtype=np.int64)
    support = stack.support_channel
    part_pieces, printed_pieces = Pieces(rows, width), Pieces(rows, width)
    hollow_pieces = Pieces(rows, width)
    thin = [_Thin(rows, width, wall, True), _Thin(rows, width, gap, False)]
    alone = _Neighbours(blank, valid, facts.specks)
    holes = _Neighbours(~blank, valid, facts.holes)
    for k, layer in enumerate(_layers(stack)):
        facts.bad_files += [(k, c, text) for c, text in layer.bad]
        facts.changed_files += [(k, c) for c in layer.changed]
        count_planes(layer.planes, sites)
        printed, twice = np.empty_like(blank), np.empty_like(blank)
        claims(layer.planes, printed, twice)
        facts.twice.note(k, twice, _count(twice))
        part = printed
        if support is not None:
            part = np.empty_like(blank)
            claims(np.delete(layer.planes, support, axis=0), part, twice)
            printed_pieces.add(printed)
        part_pieces.add(part)
        hollow_pieces.add(~part & valid)
        alone.push(part)
        holes.push(~part)
        for screen in thin:
            screen.push(part)
        monitor.report("checking layers", done=k + 1, total=stack.n_layers)
    hollow_pieces.add(valid)  # the open space above the last layer
    alone.finish()
    holes.finish()
    facts.sites = [int(n) for n in sites]
    facts.part = part_pieces.found()
    facts.printed = facts.part if support is None else printed_pieces.found()
    facts.hollows = hollow_pieces.found()
    facts.walls, facts.gaps = (screen.found() for screen in thin)
    return facts

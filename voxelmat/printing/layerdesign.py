"""Every layer of a stack against its design, on points well off any outline.

Independent of the slicer: the design's outline is evaluated on a coarse lattice of sites that is
moved from layer to layer. Points near the outline and points in blends are left out, so neither
rounding nor a halftone can be taken for a fault.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from voxelmat.kernels.bitplane import count_planes
from voxelmat.model.finding import Finding
from voxelmat.model.halftone import Halftone
from voxelmat.model.part import DISTANCE_STEPS, Part
from voxelmat.printing.raster import Raster
from voxelmat.printing.readback import Stack
from voxelmat.printing.stackparts import StackPart
from voxelmat.printing.support import outline_field

__all__ = ["ExpectedLayers"]

Bools = NDArray[np.bool_]
_FULL = np.uint64(2**64 - 1)
_LATTICE = 64  # points along rows and along columns
#: Share of the points of a layer that may be wrong; a feature between two voxels may be drawn
#: otherwise than straight interpolation says. Ours.
_WRONG = 0.01
_FEWEST = 4
_NAMED = 3
_TURNS = {"as it is": (1, 1), "columns": (1, -1), "rows": (-1, 1), "180 degrees": (-1, -1)}


@dataclass(slots=True)
class _Seen:
    """Of one layer: points judged, wrong ones for each turn, and the first wrong pixel."""

    layer: int
    points: int
    wrong: dict[str, int]
    place: tuple[int, int]
    empty: bool


class ExpectedLayers:
    """Feed decoded layers from the tray upwards, then ask for the findings.

    Parameters
    ----------
    stack : Stack
    part : Part
        The design of one of its parts, compensated for the printer's bias.
    placed : StackPart
        Where it stands in the images.

    Attributes
    ----------
    sites : ndarray of int64, shape (channels,)
        Droplet sites of each channel in the part's window, counted on the way.
    """

    def __init__(self, stack: Stack, part: Part, placed: StackPart) -> None:
        raster = placed.raster
        self._stack = stack
        self._placed = placed
        self.sites = np.zeros(len(stack.channels), dtype=np.int64)
        self._field = raster.to_image(outline_field(part))
        self._labels = raster.to_image(part.labels)
        self._index = [raster.image_index(part.grid, m) for m in range(3)]
        # A site at the rim of the grid may lie half outside it.
        self._within = [
            (i >= 0.5 * s - 0.5) & (i <= n - 0.5 - 0.5 * s)
            for i, n in zip(self._index, self._field.shape, strict=True)
            for s in (float(np.abs(np.diff(i)).max(initial=0.0)),)
        ]
        if part.distance is not None:
            pitch = max(float(p) for p in raster.pitch)
            self._sure = DISTANCE_STEPS * pitch / min(part.grid.spacing) + 2.0
        else:
            self._sure = 7.9 if part.occupancy is None else 100.0
        table = part.palette_fractions()
        self._pure = np.where(table.max(axis=1) == 1.0, table.argmax(axis=1), -1)
        halftone = Halftone.from_dict(stack.manifest["method"].get("settings", {}))
        if halftone.has_widths:
            self._leave_out_interfaces(halftone.widest_mm / 2, raster, part)
        number = {m.name: n for n, m in enumerate(part.resins)}
        self._resin = np.array([number.get(c.resin, -2) for c in stack.channels])
        self._model = np.array([c.role != "support" for c in stack.channels])
        self._seen: list[_Seen] = []

    def _leave_out_interfaces(self, reach_mm: float, raster: Raster, part: Part) -> None:
        """Take the label from voxels within reach of another pure zone: others are laid there."""
        size = [
            2 * int(np.ceil(reach_mm / part.grid.spacing[a] + 1)) + 1 for a, _ in raster.part_axes()
        ]
        pure = self._pure[self._labels]
        highest = ndimage.maximum_filter(pure, size)
        lowest = ndimage.minimum_filter(np.where(pure < 0, len(self._pure), pure), size)
        self._labels = np.where(highest > lowest, 0, self._labels)

    def _lattice(self, layer: int) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        """Rows and columns of the points, moved by a golden section a layer."""
        found = []
        for m, ratio in ((1, 0.618), (2, 0.382)):
            n = len(self._index[m])
            count = min(n, _LATTICE)
            at = (np.arange(count) + (layer * ratio) % 1.0) * n / count
            found.append(np.minimum(at.astype(np.int64), n - 1))
        return found[0], found[1]

    def _corners(
        self, layer: int, rows: NDArray[np.int64], columns: NDArray[np.int64]
    ) -> tuple[NDArray[np.float32], NDArray[np.uint16]]:
        """Field at the points, and the one label of all eight voxels round each (0 if several)."""
        low, high, weight = [], [], []
        for m, at in ((0, np.array([layer])), (1, rows), (2, columns)):
            n = self._field.shape[m]
            index = np.clip(self._index[m][at], 0, n - 1)
            first = np.minimum(index.astype(np.int64), max(n - 2, 0))
            low.append(first)
            high.append(np.minimum(first + 1, n - 1))
            weight.append((index - first).astype(np.float32))
        value: NDArray[np.float32] = np.zeros((len(rows), len(columns)), dtype=np.float32)
        one = self._labels[np.ix_(low[0], low[1], low[2])][0]
        for a in (0, 1):
            for b in (0, 1):
                for c in (0, 1):
                    corner = np.ix_(
                        *(h if up else g for g, h, up in zip(low, high, (a, b, c), strict=True))
                    )
                    share = [w if up else 1 - w for w, up in zip(weight, (a, b, c), strict=True)]
                    value += share[0][0] * np.outer(share[1], share[2]) * self._field[corner][0]
                    one = np.where(self._labels[corner][0] == one, one, 0)
        return value, one

    def push(self, layer: int, planes: NDArray[np.uint64]) -> None:
        """Take in a layer of the stack, words ``[channel, row, word]``."""
        layer -= self._placed.layers.start
        if not 0 <= layer < len(self._index[0]):
            return
        self._count(planes)
        rows, columns = self._lattice(layer)
        value, label = self._corners(layer, rows, columns)
        inside, sure = value < 0, np.abs(value) > self._sure
        sure &= self._within[0][layer] & np.outer(self._within[1][rows], self._within[2][columns])
        pure = np.where(sure & inside, self._pure[label], -1)
        n_rows, n_columns = len(self._index[1]), len(self._index[2])
        wrong: dict[str, int] = {}
        place = (int(rows[0]), int(columns[0]))
        for words, (up, along) in _TURNS.items():
            at = rows if up > 0 else n_rows - 1 - rows
            to = columns if along > 0 else n_columns - 1 - columns
            bits = self._bits(planes, at + self._placed.rows.start, to + self._placed.columns.start)
            solid = bits[self._model].any(axis=0)
            off = sure & (solid != inside)
            if (pure >= 0).any():
                right = (bits & (self._resin[:, None, None] == pure)).any(axis=0)
                off |= (pure >= 0) & ~right
            wrong[words] = int(off.sum())
            if up > 0 and along > 0:
                empty = not solid.any()
                if not off.any():
                    break
                first = np.argwhere(off)[0]
                place = (int(rows[first[0]]), int(columns[first[1]]))
        self._seen.append(_Seen(layer, int(sure.sum()), wrong, place, empty))

    def _count(self, planes: NDArray[np.uint64]) -> None:
        """Add the sites of a layer within the part's window."""
        rows, columns = self._placed.rows, self._placed.columns
        first, last = columns.start >> 6, (columns.stop + 63) >> 6
        cut = planes[:, rows, first:last].copy()
        cut[:, :, 0] &= _FULL >> np.uint64(columns.start & 63)
        cut[:, :, -1] &= _FULL << np.uint64(-columns.stop & 63)
        count_planes(cut, self.sites)

    @staticmethod
    def _bits(
        planes: NDArray[np.uint64], rows: NDArray[np.int64], columns: NDArray[np.int64]
    ) -> Bools:
        words = planes[:, rows][:, :, columns >> 6]
        shift = (63 - (columns & 63)).astype(np.uint64)
        return (words >> shift & np.uint64(1)).astype(np.bool_)

    def findings(self) -> Iterator[Finding]:
        """Layers that are not those of the design."""
        bad = [
            s for s in self._seen
            if s.wrong["as it is"] >= max(_FEWEST, _WRONG * s.points)
        ]  # fmt: skip
        if not bad:
            return
        turn = self._turn(bad)
        if turn and len(bad) > 0.5 * len(self._seen):
            yield Finding(
                severity="stop",
                code="mirrored stack",
                message=f"{len(bad)} of {len(self._seen)} layers fit the design only when "
                f"{_turned(turn)}.",
                place_mm=self._place(bad[0]),
                remedy="Write the stack again; do not turn or mirror its images.",
                value=len(bad),
                limit=0,
            )
            return
        for seen in bad[:_NAMED]:
            own = self._turn([seen])
            what = (
                "is blank" if seen.empty
                else f"fits only when {_turned(own)}" if own
                else f"differs in {seen.wrong['as it is']} of {seen.points} points looked at"
            )  # fmt: skip
            yield Finding(
                severity="stop",
                code="wrong layer",
                message=f"Layer {seen.layer} is not that of the design: it {what} "
                f"({len(bad)} such layers in all).",
                place_mm=self._place(seen),
                remedy="Write the stack again from this design.",
                value=len(bad),
                limit=0,
            )

    def _turn(self, bad: list[_Seen]) -> str:
        """The turn that explains nearly everything; empty where none does."""
        now = sum(s.wrong["as it is"] for s in bad)
        off = {words: sum(s.wrong[words] for s in bad) for words in list(_TURNS)[1:]}
        best = min(off, key=off.__getitem__)
        return best if off[best] < 0.1 * now else ""

    def _place(self, seen: _Seen) -> tuple[float, float, float]:
        return self._placed.raster.pixel_to_part(seen.layer, *seen.place)


def _turned(turn: str) -> str:
    return "turned by 180 degrees" if turn == "180 degrees" else f"mirrored along its {turn}"

"""Islands that begin in mid-air, and flat overhangs that hang free from one layer to the next.

The rules are ours. An island is a piece of a layer with nothing printed under any of its sites. A
flat overhang is `OVERHANG_MM2` or more, and a fifth of the layer or more, that hangs free at once.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from voxelmat.kernels.bitplane import first_site
from voxelmat.kernels.components import find_runs
from voxelmat.kernels.islands import count_hanging, find_islands
from voxelmat.model.finding import Finding
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.decoded import decoded_layers
from voxelmat.printing.readback import Stack
from voxelmat.units import quantity

__all__ = ["OVERHANG_MM2", "jump_findings"]

Plane = NDArray[np.uint64]
OVERHANG_MM2 = 25.0
_OVERHANG_SHARE = 0.2
_ISLAND = 8  # sites; smaller ones are specks
_NAMED = 3


class _Jumps:
    """What is seen while the layers go by."""

    def __init__(self, stack: Stack) -> None:
        _, rows, width = stack.raster.image_shape
        self._stack = stack
        self._printed = np.zeros((rows, (width + 63) // 64), np.uint64)
        self._runs = 4096
        self._layer = 0
        self.islands: list[tuple[int, int, int, int]] = []
        self.overhangs: list[tuple[int, int, int, int]] = []

    def push(self, here: Plane, printed: Plane) -> None:
        """Take in the part's sites of the next layer, and those with support."""
        layer = self._layer
        sites, hangs = count_hanging(here, self._printed)
        if layer >= 1 and hangs:
            if hangs >= max(_OVERHANG_SHARE * sites, self._free_sites()):
                row, column = first_site(here & ~self._printed)
                self.overhangs.append((hangs, layer, row, column))
            self._find_islands(printed, layer)
        self._printed = printed
        self._layer += 1

    def _free_sites(self) -> float:
        pitch = self._stack.pitch_mm
        return OVERHANG_MM2 / (pitch[0] * pitch[1])

    def _find_islands(self, plane: Plane, layer: int) -> None:
        row_start = np.zeros(plane.shape[0] + 1, np.int64)
        while True:
            first, last = (np.empty(self._runs, np.int32) for _ in range(2))
            runs = find_runs(plane, row_start, first, last)
            if runs <= self._runs:
                break
            self._runs = 2 * runs
        parent, area = np.empty(runs, np.int64), np.empty(runs, np.int64)
        out = np.empty((64, 3), np.int64)
        held = np.empty(runs, np.uint8)
        n = find_islands(row_start, first, last, self._printed, parent, held, area, out)
        for size, row, column in out[: min(n, len(out))]:
            if size >= _ISLAND:
                self.islands.append((int(size), layer, int(row), int(column)))


def jump_findings(stack: Stack, *, monitor: Monitor = SILENT) -> list[Finding]:
    """Look for what hangs free between the layers of a written stack.

    Parameters
    ----------
    stack : Stack
    monitor : Monitor

    Returns
    -------
    list of Finding
        Codes "island in mid-air" and "flat overhang", the value in mm^2. Where the machine adds
        the support, what hangs free is no finding.
    """
    if stack.support_policy == "machine":
        return []
    jumps = _Jumps(stack)
    for k, layer in enumerate(decoded_layers(stack)):
        solid, _ = layer.union(support=False)
        printed, _ = layer.union(support=True)
        jumps.push(solid, printed)
        monitor.report("comparing layers", done=k + 1, total=stack.n_layers)
    return list(_hanging(stack, jumps))


def _hanging(stack: Stack, jumps: _Jumps) -> Iterator[Finding]:
    site = stack.pitch_mm[0] * stack.pitch_mm[1]
    for code, seen, what in (
        ("island in mid-air", jumps.islands, "begins with nothing under it"),
        ("flat overhang", jumps.overhangs, "hangs free from one layer to the next"),
    ):
        seen.sort(reverse=True)
        for sites, layer, row, column in seen[:_NAMED]:
            part, place = stack.locate(layer, row, column)
            yield Finding(
                severity="warn",
                code=code,
                message=f"In layer {layer} a piece of {quantity(sites * site, 'mm^2')} {what} "
                f"({len(seen)} such places in all).",
                place_mm=place,
                remedy="Support it, turn the part, or let it grow from what lies below.",
                value=sites * site,
                limit=0.0 if code.startswith("island") else OVERHANG_MM2,
                unit="mm^2",
                part=part if len(stack.parts) > 1 else "",
            )

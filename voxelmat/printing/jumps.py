"""Jumps from layer to layer: islands in mid-air, flat overhangs, layers that fit no neighbour.

The rules are ours. An island is a piece of a layer with nothing printed under any of its sites. A
flat overhang is `OVERHANG_MM2` or more, and a fifth of the layer or more, that hangs free at once.
A layer is out of line where it differs from both neighbours by more than `OUT_OF_LINE` times what
these differ from each other.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from voxelmat.io.bigpart import AnyPart
from voxelmat.kernels.bitplane import first_site
from voxelmat.kernels.components import find_runs
from voxelmat.kernels.islands import compare_layers, find_islands
from voxelmat.model.finding import Finding
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.decoded import decoded_layers
from voxelmat.printing.expected import Expected
from voxelmat.printing.readback import Stack
from voxelmat.units import quantity

__all__ = ["OUT_OF_LINE", "OVERHANG_MM2", "jump_findings"]

Plane = NDArray[np.uint64]
OVERHANG_MM2 = 25.0
_OVERHANG_SHARE = 0.2
OUT_OF_LINE = 4.0
_LEAST_SITES = 64  # by which a layer out of line differs at least
_ISLAND = 8  # sites; smaller ones are specks
_NAMED = 3


class _Jumps:
    """What is seen while the layers go by."""

    def __init__(self, stack: Stack) -> None:
        _, rows, width = stack.raster.image_shape
        self._stack = stack
        blank = np.zeros((rows, (width + 63) // 64), np.uint64)
        self._earlier, self._below, self._printed = blank, blank, blank
        self._counts = np.zeros(5, np.int64)
        self._runs = 4096
        self._blank = blank
        self._layer = 0
        self.islands: list[tuple[int, int, int, int]] = []
        self.overhangs: list[tuple[int, int, int, int]] = []
        self.odd: list[int] = []

    def push(self, here: Plane, printed: Plane) -> None:
        """Take in the part's sites of the next layer, and those with support."""
        counts, layer = self._counts, self._layer
        compare_layers(self._earlier, self._below, here, self._printed, counts)
        sites, was, now, across, hangs = (int(v) for v in counts)
        if layer >= 2 and min(was, now) > OUT_OF_LINE * across + _LEAST_SITES:
            self.odd.append(layer - 1)
        if layer >= 1 and hangs:
            if hangs >= max(_OVERHANG_SHARE * sites, self._free_sites()):
                row, column = first_site(here & ~self._printed)
                self.overhangs.append((hangs, layer, row, column))
            self._find_islands(printed, layer)
        self._earlier, self._below, self._printed = self._below, here, printed
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


def jump_findings(
    stack: Stack, part: AnyPart | None = None, *, monitor: Monitor = SILENT
) -> list[Finding]:
    """Look for jumps between the layers of a written stack.

    Parameters
    ----------
    stack : Stack
    part : Part or StoredPart, optional
        What a stack of one part was sliced from (with the bias of the printer taken off, where
        the profile states one): every layer is then compared with it on a sample of places.
    monitor : Monitor

    Returns
    -------
    list of Finding
        Codes "island in mid-air", "flat overhang", "layer out of line", "other layer". Where the
        machine adds the support, what hangs free is no finding.
    """
    jumps = _Jumps(stack)
    expected = None if part is None or len(stack.parts) != 1 else Expected(stack, part)
    for k, layer in enumerate(decoded_layers(stack)):
        solid, _ = layer.union(support=False)
        printed, _ = layer.union(support=True)
        jumps.push(solid, printed)
        if expected is not None:
            expected.compare(k, solid)
        monitor.report("comparing layers", done=k + 1, total=stack.n_layers)
    found = list(_odd(stack, jumps.odd))
    if expected is not None:
        found += _other(stack, expected)
    if stack.support_policy != "machine":
        found += _hanging(stack, jumps)
    return found


def _odd(stack: Stack, layers: list[int]) -> Iterator[Finding]:
    for k in layers[:_NAMED]:
        yield Finding(
            severity="stop",
            code="layer out of line",
            message=f"Layer {k} fits neither the layer below nor the one above, while these fit "
            f"each other ({len(layers)} such layers in all).",
            place_mm=_middle(stack, k),
            remedy="Write the stack again; a layer is missing, or in the wrong place.",
            value=len(layers),
            limit=0,
        )


def _other(stack: Stack, expected: Expected) -> Iterator[Finding]:
    for k, share in expected.differing[:_NAMED]:
        twin = expected.fits(k)
        said = f"; it is layer {twin} of the design" if twin is not None else ""
        yield Finding(
            severity="stop",
            code="other layer",
            message=f"Layer {k} is not that of the design: {100 * share:.2g} % of the places "
            f"looked at differ{said} ({len(expected.differing)} such layers in all).",
            place_mm=_middle(stack, k),
            remedy="Write the stack again from this design.",
            value=share,
            limit=expected.limit,
        )


def _middle(stack: Stack, layer: int) -> tuple[float, float, float]:
    _, rows, columns = stack.raster.image_shape
    return stack.locate(layer, rows // 2, columns // 2)[1]


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

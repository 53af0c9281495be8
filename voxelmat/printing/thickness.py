"""Walls, struts, gaps and holes under the profile's minimum in 3-D thickness, on a written stack.

Solid is judged against empty, support counting as empty. The screen runs on all droplet sites, in
bands of rows so that its memory is bounded; what it names is measured on the sites round it, and
is a finding only where it is below the minimum by more than half a site.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import FileFormatError
from voxelmat.model.finding import Finding
from voxelmat.model.profile import PrintProfile
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.ballscreen import BallScreen
from voxelmat.printing.bands import Band, split_rows
from voxelmat.printing.decoded import decoded_layers
from voxelmat.printing.measure import Measured, Sites, Triple, image_sizes, measure
from voxelmat.printing.pieces import Piece
from voxelmat.printing.readback import Stack
from voxelmat.units import quantity

__all__ = ["image_triple", "solid_block", "thickness_findings"]

_MEMORY = 256 << 20  # bytes for the layers that the screens keep
_LEAST = 8  # sites; smaller pieces are specks
_MEASURED = 6  # pieces of one kind that are measured, the largest first
_NAMED = 3  # of these are listed


@dataclass(frozen=True, slots=True)
class _Kind:
    """One screen: what it looks for, its limit along layers, rows and columns, mm."""

    solid: bool
    flat: bool | None  # only walls, only struts, or either
    limit: Triple

    @property
    def ball(self) -> Triple:
        """Diameters of the ball that what is thick enough holds.

        A wall's limit counts across it. That of a strut depends on the way it runs, which only
        measuring tells, so the largest is screened for.
        """
        most = max(self.limit)
        return self.limit if self.flat else (most, most, most)


def image_triple(stack: Stack, xyz: Triple) -> Triple:
    """Values along tray x, y, z in the order layers, rows, columns."""
    layer, row, column = (xyz[axis] for axis, _ in stack.raster.image_axes)
    return (layer, row, column)


def _kinds(stack: Stack, profile: PrintProfile) -> list[_Kind]:
    least = profile.minimum
    found = []
    for solid, flat, thin in (
        (True, least.wall_xyz, least.strut_xyz),
        (False, least.gap_xyz, least.hole_xyz),
    ):
        if flat == thin and len(set(flat)) == 1:
            kinds: list[tuple[bool | None, Triple]] = [(None, flat)]
        else:
            kinds = [(True, flat), (False, thin)]
        found += [_Kind(solid, f, image_triple(stack, t)) for f, t in kinds]
    return found


def thickness_findings(
    stack: Stack, profile: PrintProfile | None = None, *, monitor: Monitor = SILENT
) -> list[Finding]:
    """Features under the minimum in 3-D thickness, with place, value and limit.

    Parameters
    ----------
    stack : Stack
    profile : PrintProfile, optional
        The one in the manifest if left out.
    monitor : Monitor

    Returns
    -------
    list of Finding
        Codes "wall under minimum", "strut ...", "gap ..." and "hole under minimum"; the value is
        the largest inscribed thickness near the place, the limit that across the feature.
        Layers that cannot be read count as empty.
    """
    profile = stack.profile if profile is None else profile
    pitch = image_triple(stack, stack.pitch_mm)
    kinds = _kinds(stack, profile)
    sizes = [(image_sizes(k.ball, pitch), k.solid) for k in kinds]
    places: list[list[Piece]] = [[] for _ in kinds]
    _, rows, width = stack.raster.image_shape
    reach = max(3 * s[1] for s, _ in sizes) + 2
    bands = split_rows((rows, width), sum(8 * s[0] + s[2] for s, _ in sizes), reach, _MEMORY)

    def screens(height: int) -> list[BallScreen]:
        return [BallScreen(height, width, s, solid=solid) for s, solid in sizes]

    for number, inner in enumerate(bands):
        band = Band(inner, (rows, width), reach, screens)
        for k, layer in enumerate(decoded_layers(stack)):
            band.push(layer.union(support=False)[0])
            done = number * stack.n_layers + k + 1
            monitor.report("measuring thickness", done=done, total=stack.n_layers * len(bands))
        for kept, pieces in zip(places, band.found(), strict=True):
            kept += [p for p in pieces if p.sites >= _LEAST]
    found: list[Finding] = []
    for kind, thin in zip(kinds, places, strict=True):
        thin.sort(key=lambda p: -p.sites)
        found += _named(stack, profile, kind, thin, pitch)
    return found


def _named(
    stack: Stack,
    profile: PrintProfile,
    kind: _Kind,
    pieces: list[Piece],
    pitch: Triple,
) -> Iterator[Finding]:
    """Measure the largest pieces and list those that are under their limit."""
    listed = 0
    for piece in pieces[:_MEASURED]:
        column, row, layer = piece.place
        at = (layer, row, column)
        low, result = _measured(stack, kind, at, pitch)
        if result is None or (kind.flat is not None and result.flat != kind.flat):
            continue
        limit = result.allowed(kind.limit)
        if result.thickness >= limit - 0.5 * result.site(pitch):
            continue
        name = ("wall" if kind.solid else "gap") if result.flat else (
            "strut" if kind.solid else "hole"
        )  # fmt: skip
        layer, row, column = (a + b for a, b in zip(low, result.at, strict=True))
        part, place = stack.locate(layer, row, column)
        volume = piece.sites * float(stack.raster.site_volume)
        yield Finding(
            severity="warn",
            code=f"{name} under minimum",
            message=f"A {name} is {quantity(result.thickness, 'mm')} thick; '{profile.name}' makes "
            f"{quantity(limit, 'mm')} reliably there. {quantity(volume, 'mm^3')} hang together "
            f"that hold no ball of that size ({len(pieces)} such places in all).",
            place_mm=place,
            remedy="Thicken it." if kind.solid else "Widen it or close it.",
            value=result.thickness,
            limit=limit,
            unit="mm",
            part=part if len(stack.parts) > 1 else "",
        )
        listed += 1
        if listed == _NAMED:
            return


def _measured(stack: Stack, kind: _Kind, at: Sites, pitch: Triple) -> tuple[Sites, Measured | None]:
    reach = [4 * n + 2 for n in image_sizes(kind.ball, pitch)]
    low = tuple(a - n for a, n in zip(at, reach, strict=True))
    high = tuple(a + n + 1 for a, n in zip(at, reach, strict=True))
    start = (low[0], low[1], low[2])
    block = solid_block(stack, start, (high[0], high[1], high[2]))
    if not kind.solid:
        block = ~block
    here = (reach[0], reach[1], reach[2])
    return start, measure(block, here, kind.ball, pitch)


def solid_block(stack: Stack, low: Sites, high: Sites) -> NDArray[np.bool_]:
    """Sites of the model channels from `low` up to, without, `high`, as bool.

    Layers, rows and columns beyond the stack, and layers that cannot be read, are empty.
    """
    n_layers, rows, width = stack.raster.image_shape
    block = np.zeros([b - a for a, b in zip(low, high, strict=True)], dtype=np.bool_)
    model = [m for m, c in enumerate(stack.channels) if c.role != "support"]
    r0, r1 = max(low[1], 0), min(high[1], rows)
    c0, c1 = max(low[2], 0), min(high[2], width)
    for layer in range(max(low[0], 0), min(high[0], n_layers)):
        try:
            bits = np.bitwise_or.reduce(stack.bits(layer)[model, r0:r1], axis=0)
        except FileFormatError:
            continue
        cut = np.unpackbits(bits[:, c0 // 8 : (c1 + 7) // 8], axis=1)[:, c0 % 8 :]
        out = block[layer - low[0], r0 - low[1] : r1 - low[1], c0 - low[2] : c1 - low[2]]
        out[:] = cut[:, : c1 - c0]
    return block

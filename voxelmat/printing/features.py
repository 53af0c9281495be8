"""What preflight says of pieces, cavities and features that are too small."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from voxelmat.kernels.bitplane import to_words
from voxelmat.model.finding import Finding
from voxelmat.model.part import Part
from voxelmat.model.profile import PrintProfile
from voxelmat.printing.pieces import Piece
from voxelmat.printing.readback import Stack
from voxelmat.printing.scan import Facts
from voxelmat.printing.thin import ThinScreen
from voxelmat.units import quantity

__all__ = ["piece_findings", "small_findings", "zone_findings"]

_SPECK = 8  # sites; smaller pieces are counted as specks and not named one by one
_NAMED = 3  # findings of one kind that are listed with their place; the rest is counted


def _place(stack: Stack, piece: Piece) -> tuple[float, float, float]:
    column, row, layer = piece.place
    return stack.raster.pixel_to_part(layer, row, column)  # `preflight` names the part


def _by_part(stack: Stack, pieces: list[Piece]) -> dict[str, list[Piece]]:
    """The pieces of each part of a tray, in the order given."""
    found: dict[str, list[Piece]] = {}
    for piece in pieces:
        column, row, layer = piece.place
        name = stack.locate(layer, row, column)[0] if len(stack.parts) > 1 else ""
        found.setdefault(name, []).append(piece)
    return found


def _volume(stack: Stack, piece: Piece) -> str:
    return quantity(piece.sites * float(stack.raster.site_volume), "mm^3")


def piece_findings(stack: Stack, facts: Facts) -> Iterator[Finding]:
    """Floating pieces, a part that falls into several, sealed cavities."""
    yield from _floating(stack, facts)
    whole = [p for p in facts.part if p.sites >= _SPECK]
    for name, pieces in _by_part(stack, whole).items():
        if len(pieces) < 2:
            continue
        what = f"'{name}'" if name else "the part"
        yield Finding(
            severity="warn",
            code="separate pieces",
            message=f"Without support {what} comes in {len(pieces)} pieces; the smallest has "
            f"{_volume(stack, pieces[-1])}.",
            place_mm=_place(stack, pieces[-1]),
            remedy="Join what should be one part.",
            value=len(pieces),
            limit=1,
        )
    sealed = [p for p in facts.hollows if not p.on_tray and not p.at_side and p.sites >= _SPECK]
    for piece in sealed[:_NAMED]:
        yield Finding(
            severity="warn",
            code="sealed cavity",
            message=f"A cavity of {_volume(stack, piece)} has no way out: support inside it stays "
            f"there ({len(sealed)} such cavities in all).",
            place_mm=_place(stack, piece),
            remedy="Add a drain, or fill the cavity with a resin.",
            value=len(sealed),
            limit=0,
        )


def _floating(stack: Stack, facts: Facts) -> Iterator[Finding]:
    """Pieces of what is printed (support included) that do not reach the tray."""
    floating = [p for p in facts.printed if not p.on_tray and p.sites >= _SPECK]
    machine = stack.support_policy == "machine"
    for piece in floating[:_NAMED]:
        what = f"A piece of {_volume(stack, piece)} ({len(floating)} such pieces in all)"
        if machine:
            yield Finding(
                severity="note",
                code="floating piece",
                message=f"{what} is held only by the support that the machine adds.",
                place_mm=_place(stack, piece),
                remedy="Check that it is meant to be loose.",
                value=len(floating),
            )
        else:
            yield Finding(
                severity="stop",
                code="floating piece",
                message=f"{what} is held by nothing below it.",
                place_mm=_place(stack, piece),
                remedy="Join it to the part, support it, or remove it.",
                value=len(floating),
                limit=0,
            )


def small_findings(stack: Stack, facts: Facts, profile: PrintProfile) -> Iterator[Finding]:
    """Walls, struts and gaps under the profile's minimum, specks and pinholes."""
    smallest = profile.minimum
    for name, pieces, limit, remedy in (
        ("wall or strut", facts.walls, min(smallest.wall, smallest.strut), "Thicken it."),
        ("gap", facts.gaps, smallest.gap, "Widen it or close it."),
    ):
        large = [p for p in pieces if p.sites >= _SPECK]
        for piece in large[:_NAMED]:
            yield Finding(
                severity="warn",
                code=f"thin {name}",
                message=f"A {name} holds no cube of {limit:g} mm, the minimum of "
                f"'{profile.name}', over {_volume(stack, piece)} ({len(large)} such places in "
                "all).",
                place_mm=_place(stack, piece),
                remedy=remedy,
                value=len(large),
                limit=limit,
                unit="mm",
            )
    for code, seen, what in (
        ("specks", facts.specks, "solid sites have only empty neighbours"),
        ("pinholes", facts.holes, "empty sites have only solid neighbours"),
    ):
        if seen.place is not None:
            yield Finding(
                severity="warn",
                code=code,
                message=f"{seen.sites} {what} on their six sides.",
                place_mm=stack.raster.pixel_to_part(*seen.place),
                remedy="Check the design there; a feature may be thinner than the raster.",
                value=seen.sites,
                limit=0,
            )


def zone_findings(part: Part, profile: PrintProfile) -> Iterator[Finding]:
    """Zones of one pure resin that are thinner than the smallest feature.

    Judged on the design's voxels, where a zone that is not dithered is known as such; a zone goes
    on into blends that hold at least half of its resin, so the end of a gradient is no thin zone.
    Voxels as large as the minimum cannot be judged and give no finding.
    """
    limit = profile.minimum.feature
    grid = part.grid
    # The screen's layers, rows and columns are z, y and x here.
    size = [max(1, int(limit / h + 1e-9)) for h in grid.spacing]
    if max(size) < 2:
        return
    fractions = part.palette_fractions()
    for column, resin in enumerate(part.resins):
        pure = (fractions[:, column] == 1)[part.labels]
        if resin.kind == "bought-in" or not pure.any():
            continue
        zone = (fractions[:, column] >= 0.5)[part.labels]
        thin = pure & _thin_voxels(zone, (size[2], size[1], size[0]))
        count = int(thin.sum())
        if count:
            voxel = np.argwhere(thin)[0]
            x, y, z = (c[i] for c, i in zip(grid.centres(), voxel, strict=True))
            yield Finding(
                severity="note",
                code="thin zone",
                message=f"{quantity(count * grid.voxel_volume, 'mm^3')} of pure '{resin.name}' lie "
                f"in zones that hold no cube of {limit:g} mm, the smallest feature of "
                f"'{profile.name}' (judged on voxels of {min(grid.spacing):g} mm).",
                place_mm=(float(x), float(y), float(z)),
                remedy="Droplets of neighbouring zones blur into it; thicken it or leave it out.",
                value=count * grid.voxel_volume,
                limit=limit,
                unit="mm",
            )


def _thin_voxels(zone: NDArray[np.bool_], size: tuple[int, int, int]) -> NDArray[np.bool_]:
    """Voxels of a zone ``[i, j, k]`` near which no box of `size` (z, y, x) fits."""
    width = zone.shape[0]
    screen = ThinScreen(zone.shape[1], width, size, solid=True)
    found = []
    for k in range(zone.shape[2]):
        bits = np.packbits(zone[:, :, k].T, axis=1)
        words = np.empty((bits.shape[0], (bits.shape[1] + 7) // 8), dtype=np.uint64)
        to_words(np.ascontiguousarray(bits), words)
        thin = screen.push(words)
        found += [] if thin is None else [thin]
    found += screen.finish()
    bytes_ = np.stack(found).astype(">u8").view(np.uint8)
    return np.unpackbits(bytes_, axis=2, count=width).astype(np.bool_).transpose(2, 1, 0)

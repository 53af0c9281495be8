"""Volumes of resins that were printed against those of the design as it was sliced."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence

from voxelmat.model.finding import Finding
from voxelmat.printing.raster import Raster
from voxelmat.printing.readback import Stack
from voxelmat.units import quantity

__all__ = ["VOLUME_TOLERANCE", "volume_findings"]

#: Printed against designed volume of a resin may differ by so much, beyond what the rounding of
#: the outline to whole sites explains: between voxel centres a curved outline is drawn by chords.
VOLUME_TOLERANCE = 0.02


def volume_findings(
    stack: Stack,
    sites: Sequence[int],
    designed: Mapping[str, float],
    *,
    raster: Raster | None = None,
    name: str = "",
) -> Iterator[Finding]:
    """Resins whose volume differs from the design's.

    Parameters
    ----------
    stack : Stack
    sites : sequence of int
        Droplet sites of each channel.
    designed : mapping of str to float
        Volume of each resin in the design, compensated for the printer's bias, mm^3.
    raster : Raster, optional
        Window in which the sites were counted; that of the stack if left out.
    name : str
        Of the part on a tray of several.
    """
    window = stack.raster if raster is None else raster
    rounding = sum(1 / n for n in window.shape)  # half a site at each of two ends, every axis
    printed: dict[str, int] = {}
    for channel, count in zip(stack.channels, sites, strict=True):
        printed[channel.resin] = printed.get(channel.resin, 0) + int(count)
    for resin, wanted in designed.items():
        volume = printed.get(resin, 0) * float(stack.raster.site_volume)
        allowed = VOLUME_TOLERANCE + rounding
        if abs(volume - wanted) > allowed * wanted:
            share = abs(volume - wanted) / wanted if wanted else 1.0
            yield Finding(
                severity="stop" if share > 5 * allowed else "warn",
                code="volume",
                message=f"'{resin}' takes {quantity(volume, 'mm^3', 4)} in the stack and "
                f"{quantity(wanted, 'mm^3', 4)} in the design as sliced, {100 * share:.2g} % "
                "apart.",
                remedy="Look for a feature that the raster loses; take finer design voxels.",
                value=volume,
                limit=wanted,
                unit="mm^3",
                part=name,
            )

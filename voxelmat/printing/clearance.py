"""Whether parts on a tray keep their distance, judged on the droplet sites and not on boxes.

What counts is the shadow of a part: the sites of the tray over which any of its layers lays a
droplet, support included. So a support column, which stays within the shadow of what it holds
up, never runs into another part, and no part stands below the overhang of another.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from voxelmat.errors import InputError
from voxelmat.model.halftone import Halftone
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.job import PlacedPart, PrintJob
from voxelmat.printing.raster import Raster
from voxelmat.printing.source import slicer_of

__all__ = ["Clash", "check_clearance", "clashes", "shadow"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Clash:
    """Two parts that overlap or stand too close.

    Attributes
    ----------
    first, second : str
        Names.
    gap_mm : float
        Free distance between them; 0 where they touch or overlap.
    overlap : bool
        True where they claim the same sites of the tray.
    place_mm : tuple of float
        Where, x and y on the tray.
    """

    first: str
    second: str
    gap_mm: float
    overlap: bool
    place_mm: tuple[float, float]


def shadow(job: PrintJob, item: PlacedPart) -> NDArray[np.bool_]:
    """Where a part or its support lays a droplet in any layer.

    Parameters
    ----------
    job : PrintJob
    item : PlacedPart
        One of its parts.

    Returns
    -------
    ndarray of bool, shape ``item.raster.shape[:2]``
        Indexed ``[ix, iy]`` along tray x and y.
    """
    # Where droplets lie does not depend on which they are, so the fastest halftone will do.
    slicer = slicer_of(job.replace(halftone=Halftone()), item)
    layers, rows, columns = slicer.image_shape
    seen = np.zeros((rows, columns), dtype=np.bool_)
    for sites in slicer.sites(0, layers):
        seen |= sites[:, :columns] > 0
    return item.raster.from_image(seen)


def _reach(raster: Raster, spacing_mm: float) -> tuple[int, int]:
    """A distance in whole sites along x and y, rounded up."""
    x, y = (int(np.ceil(spacing_mm / float(p))) for p in raster.pitch[:2])
    return (x, y)


def _common(a: Raster, b: Raster, reaches: tuple[int, int]) -> tuple[slice, slice] | None:
    """Sites of the tray where both windows lie within a distance (in sites), or None."""
    cuts = []
    for axis, reach in enumerate(reaches):
        low = max(a.offset[axis], b.offset[axis])
        high = min(a.offset[axis] + a.shape[axis], b.offset[axis] + b.shape[axis])
        if low - high >= reach:
            return None
        cuts.append(slice(min(low, high) - reach, max(low, high) + reach))
    return (cuts[0], cuts[1])


def _near_pairs(job: PrintJob, reaches: tuple[int, int]) -> list[tuple[int, int]]:
    """Numbers of parts whose windows lie within a distance (in sites)."""
    low = np.array([p.raster.offset[:2] for p in job.parts])
    high = low + np.array([p.raster.shape[:2] for p in job.parts])
    found: list[tuple[int, int]] = []
    for n in range(len(low)):
        apart = np.maximum(low[n + 1 :] - high[n], low[n] - high[n + 1 :])
        close = np.flatnonzero((apart < np.array(reaches)).all(axis=1))
        found += [(n, n + 1 + int(m)) for m in close]
    return found


def _on_tray(
    seen: NDArray[np.bool_], raster: Raster, region: tuple[slice, slice]
) -> NDArray[np.bool_]:
    """A shadow cut to a region of the tray; empty beyond its window."""
    out = np.zeros([s.stop - s.start for s in region], dtype=np.bool_)
    source, target = [], []
    for axis, part in enumerate(region):
        low = max(part.start, raster.offset[axis])
        high = max(low, min(part.stop, raster.offset[axis] + raster.shape[axis]))
        source.append(slice(low - raster.offset[axis], high - raster.offset[axis]))
        target.append(slice(low - part.start, high - part.start))
    out[tuple(target)] = seen[tuple(source)]
    return out


def _clash(
    first: NDArray[np.bool_], second: NDArray[np.bool_], pitch: tuple[float, float]
) -> tuple[float, tuple[int, int], bool] | None:
    """Free distance in mm, where in the region, and whether sites are shared."""
    if not first.any() or not second.any():
        return None
    both = np.argwhere(first & second)
    if both.size:
        x, y = (int(v) for v in both[len(both) // 2])
        return 0.0, (x, y), True
    _, at = ndimage.distance_transform_edt(~first, sampling=pitch, return_indices=True)
    here = np.argwhere(second)
    steps = np.abs(at[:, here[:, 0], here[:, 1]].T - here)
    gap = np.hypot(*(np.maximum(steps - 1, 0) * np.array(pitch)).T)
    least = int(gap.argmin())
    return float(gap[least]), (int(here[least, 0]), int(here[least, 1])), False


def clashes(job: PrintJob, spacing_mm: float, *, monitor: Monitor = SILENT) -> list[Clash]:
    """Pairs of parts that overlap, or stand closer than a spacing.

    Only pairs whose windows come that near are sliced. Because positions are moved to whole
    sites, a gap may fall short of the spacing by one site along each axis.

    Parameters
    ----------
    job : PrintJob
    spacing_mm : float
    monitor : Monitor
    """
    pitch = (float(job.profile.pitch_x), float(job.profile.pitch_y))
    least = spacing_mm - float(np.hypot(*pitch))
    reach = _reach(job.window, spacing_mm)
    near = [
        (job.parts[a], job.parts[b], region)
        for a, b in _near_pairs(job, reach)
        if (region := _common(job.parts[a].raster, job.parts[b].raster, reach)) is not None
    ]
    known: dict[str, NDArray[np.bool_]] = {}
    found = []
    for done, (a, b, region) in enumerate(near):
        for item in (a, b):
            if item.name not in known:
                known[item.name] = shadow(job, item)
        cut = [_on_tray(known[item.name], item.raster, region) for item in (a, b)]
        clash = _clash(cut[0], cut[1], pitch)
        if clash is not None and (clash[2] or clash[0] < least):
            gap, (x, y), overlap = clash
            place = ((region[0].start + x + 0.5) * pitch[0], (region[1].start + y + 0.5) * pitch[1])
            found.append(
                Clash(first=a.name, second=b.name, gap_mm=gap, overlap=overlap, place_mm=place)
            )
        monitor.report("checking clearances", done=done + 1, total=len(near))
    return found


def check_clearance(job: PrintJob, spacing_mm: float, *, monitor: Monitor = SILENT) -> None:
    """Refuse a job whose parts overlap or stand too close.

    Raises
    ------
    InputError
        For the first pair, with the place.
    """
    found = clashes(job, spacing_mm, monitor=monitor)
    if not found:
        return
    c = found[0]
    x, y = c.place_mm
    more = f" {len(found) - 1} more pairs do so too." if len(found) > 1 else ""
    what = (
        f"'{c.first}' and '{c.second}' overlap on the tray at x {x:.4g}, y {y:.4g} mm."
        if c.overlap
        else f"'{c.first}' and '{c.second}' are {c.gap_mm:.3g} mm apart at x {x:.4g}, y {y:.4g} "
        f"mm; the spacing is {spacing_mm:g} mm."
    )
    raise InputError(
        f"{what} Parts may not stand over one another either, for the support of the upper would "
        f"run into the lower. Move one of them, or let it be placed automatically.{more}",
        key="position_mm",
    )

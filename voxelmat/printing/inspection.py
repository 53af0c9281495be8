"""Critical dimensions of a design, measured on the images of its stack."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from voxelmat.errors import InputError
from voxelmat.model.finding import Finding
from voxelmat.model.inspection import Dimension, InspectionSheet, Measurement
from voxelmat.model.part import Part
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.circle import fitted_circle
from voxelmat.printing.outlines import outline_at, outline_points
from voxelmat.printing.probe import Run, line_runs, section_crossings
from voxelmat.printing.readback import Stack
from voxelmat.printing.support import outline_field
from voxelmat.printing.view import PartView, part_view

__all__ = ["inspection_findings", "measure"]

_ROUND = 0.9  # share of the directions round an axis in which an outline must be met


def measure(
    stack: Stack,
    dimensions: Sequence[Dimension],
    *,
    part: Part | None = None,
    protected: Mapping[str, NDArray[np.bool_]] | None = None,
    limit_mm: float | None = None,
    name: str | None = None,
    monitor: Monitor = SILENT,
) -> InspectionSheet:
    """Measure dimensions on a stack.

    Parameters
    ----------
    stack : Stack
    dimensions : sequence of Dimension
    part : Part, optional
        The design (compensated for bias, where the printer has one); needed for `protected`.
    protected : mapping of str to ndarray of bool, optional
        Voxels ``[i, j, k]`` by name whose outline is protected: 95 % of it must lie within
        `limit_mm` of the design's.
    limit_mm : float, optional
        One pitch (the largest) if left out.
    name : str, optional
        Of the part on a tray of several.
    monitor : Monitor

    Returns
    -------
    InspectionSheet
        What cannot be measured has no value and a note why.

    Raises
    ------
    FileFormatError
        If a layer is missing or not the one that was written.
    """
    view = part_view(stack, name)
    rows = []
    for number, dimension in enumerate(dimensions):
        monitor.report("measuring", done=number, total=len(dimensions))
        rows.append(_KINDS[dimension.kind](view, dimension))
    if protected:
        if part is None:
            raise InputError("Protected surfaces are measured against the design; give the part.")
        rows += _surfaces(view, part, protected, limit_mm, monitor)
    what = f"part '{view.name}' of " if view.name else ""
    return InspectionSheet(title=f"Measured on {what}stack '{stack.folder.name}'", rows=tuple(rows))


def inspection_findings(sheet: InspectionSheet) -> list[Finding]:
    """A finding for each dimension that is out of tolerance or cannot be measured."""
    found = []
    for row in sheet:
        d = row.dimension
        if row.state == "in tolerance" or (row.state == "cannot be said" and row.measured):
            continue
        text = (
            f"'{d.name}' cannot be measured: {row.note}"
            if row.measured is None
            else f"'{d.name}' measures {row.measured:.4g} {d.unit}; {d.nominal:.4g} "
            f"{d.lower:+.3g} / {d.upper:+.3g} is wanted."
        )
        found.append(
            Finding(
                severity="warn",
                code="dimension",
                message=text,
                place_mm=None if d.kind in ("volume", "surface") else d.point_mm,
                remedy="Change the dimension in the design, or the print orientation.",
                value=row.measured,
                limit=d.nominal,
                unit=d.unit,
            )
        )
    return found


def _unit(dimension: Dimension) -> NDArray[np.float64]:
    along = np.array(dimension.direction, dtype=np.float64)
    return np.asarray(along / np.linalg.norm(along))


# ---------------------------------------------------------------- along a line
def _length_uncertainty(view: PartView, dimension: Dimension) -> float:
    """Two crossings, each off by up to half the pitch as seen along the line."""
    along = float(np.abs(_unit(dimension) / view.pitch).max())
    return 2 * math.sqrt(2) * (1 / along) / math.sqrt(12)


def _outside(view: PartView, dimension: Dimension) -> Measurement:
    solid = [r for r in line_runs(view, dimension.point_mm, _unit(dimension)) if r.solid]
    if not solid:
        return Measurement(dimension=dimension, measured=None, note="the line meets no solid.")
    return Measurement(
        dimension=dimension,
        measured=solid[-1].end - solid[0].start,
        uncertainty=_length_uncertainty(view, dimension),
    )


def _held(view: PartView, dimension: Dimension) -> Run | None:
    for run in line_runs(view, dimension.point_mm, _unit(dimension)):
        if run.start <= 0 <= run.end:
            return run
    return None


def _run(view: PartView, dimension: Dimension, solid: bool) -> Measurement:
    run = _held(view, dimension)
    if run is None or run.solid != solid:
        what = "empty" if solid else "solid"
        return Measurement(dimension=dimension, measured=None, note=f"the point lies in {what}.")
    if not solid and run.open:
        return Measurement(dimension=dimension, measured=None, note="the gap is open at an end.")
    return Measurement(
        dimension=dimension,
        measured=run.end - run.start,
        uncertainty=_length_uncertainty(view, dimension),
    )


def _wall(view: PartView, dimension: Dimension) -> Measurement:
    return _run(view, dimension, True)


def _gap(view: PartView, dimension: Dimension) -> Measurement:
    return _run(view, dimension, False)


# ---------------------------------------------------------------- round an axis
def _diameter(view: PartView, dimension: Dimension) -> Measurement:
    radius = dimension.nominal / 2
    flat, inner = section_crossings(view, dimension.point_mm, _unit(dimension), 1.4 * radius)
    size = np.hypot(flat[:, 0], flat[:, 1])
    mine = np.abs(size - radius) <= max(0.3 * radius, 3 * float(view.pitch.max()))
    near = flat[mine & (inner == (dimension.kind == "pin"))]
    if len(near) < 8:
        return Measurement(dimension=dimension, measured=None, note="no round outline is there.")
    turn = np.floor((np.arctan2(near[:, 1], near[:, 0]) / math.pi + 1) * 12).astype(int) % 24
    if len(np.unique(turn)) < _ROUND * 24:
        return Measurement(dimension=dimension, measured=None, note="the outline is not closed.")
    circle = fitted_circle(near)
    return Measurement(
        dimension=dimension,
        measured=2 * circle.radius,
        uncertainty=4 * circle.rms / math.sqrt(len(near)),
        note=f"out of round by {1000 * circle.form:.0f} um, sites included",
    )


# ---------------------------------------------------------------- amounts
def _box(view: PartView, dimension: Dimension) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """First and last pixel (without) whose centres lie in the dimension's box."""
    if dimension.low_mm is None or dimension.high_mm is None:
        return np.zeros(3, dtype=np.int64), np.array(view.shape, dtype=np.int64)
    ends = view.to_pixels(np.array([dimension.low_mm, dimension.high_mm]))
    low, high = np.ceil(ends.min(axis=0) - 1e-9), np.ceil(ends.max(axis=0) - 1e-9)
    return (
        np.clip(low, 0, view.shape).astype(np.int64),
        np.clip(high, 0, view.shape).astype(np.int64),
    )


def _amount(view: PartView, dimension: Dimension, low: NDArray[np.int64], high: NDArray[np.int64],
            site: float) -> Measurement:  # fmt: skip
    rows, columns = slice(int(low[1]), int(high[1])), slice(int(low[2]), int(high[2]))
    names = [m for m, c in enumerate(view.stack.channels) if c.role != "support"]
    if dimension.resin:
        names = [m for m in names if view.stack.channels[m].resin == dimension.resin]
        if not names:
            note = f"no channel lays '{dimension.resin}'."
            return Measurement(dimension=dimension, measured=None, note=note)
    total, rim = 0, 0
    for layer in range(int(low[0]), int(high[0])):
        plane = np.asarray(view.channels(layer)[names].any(axis=0))[rows, columns]
        total += int(plane.sum())
        rim += int((plane & ~ndimage.binary_erosion(plane, border_value=1)).sum())
    return Measurement(
        dimension=dimension,
        measured=total * site,
        uncertainty=2 * site * math.sqrt(rim / 12),
        note="" if total else "nothing is there",
    )


def _volume(view: PartView, dimension: Dimension) -> Measurement:
    low, high = _box(view, dimension)
    return _amount(view, dimension, low, high, float(view.raster.site_volume))


def _area(view: PartView, dimension: Dimension) -> Measurement:
    across = np.abs(_unit(dimension))
    axis = int(across.argmax())
    if across[axis] < 1 - 1e-9:
        raise InputError(
            f"Dimension '{dimension.name}': a section lies across x, y or z; got the direction "
            f"{dimension.direction}.",
            key="direction",
        )
    image_axis = next(m for m, (a, _) in enumerate(view.raster.part_axes()) if a == axis)
    low, high = _box(view, dimension)
    at = int(np.rint(view.to_pixels(np.array([dimension.point_mm]))[0][image_axis]))
    if not 0 <= at < view.shape[image_axis]:
        return Measurement(dimension=dimension, measured=0.0, note="the section misses the part")
    low[image_axis], high[image_axis] = at, at + 1
    site = float(view.raster.site_volume) / float(view.pitch[axis])
    return _amount(view, dimension, low, high, site)


_KINDS = {
    "outside": _outside,
    "wall": _wall,
    "gap": _gap,
    "hole": _diameter,
    "pin": _diameter,
    "area": _area,
    "volume": _volume,
}


# ---------------------------------------------------------------- protected surfaces
def _surfaces(
    view: PartView,
    part: Part,
    protected: Mapping[str, NDArray[np.bool_]],
    limit: float | None,
    monitor: Monitor,
) -> list[Measurement]:
    """95 % of the deviation of each protected surface."""
    found = outline_points(view, monitor=monitor)
    off = np.abs(outline_at(outline_field(part), part.grid, found.points))
    index = np.floor(
        (found.points - np.array(part.grid.origin)) / np.array(part.grid.spacing)
    ).astype(int)
    at = tuple(np.clip(index, 0, np.array(part.grid.shape) - 1).T)
    allowed = float(view.pitch.max()) if limit is None else limit
    rows = []
    for name, mask in protected.items():
        near = ndimage.binary_dilation(mask)[at]
        dimension = Dimension(name=name, kind="surface", nominal=0.0, lower=-allowed, upper=allowed)
        if not near.any():
            note = "none of its outline is in the layers that were looked at."
            rows.append(Measurement(dimension=dimension, measured=None, note=note))
            continue
        size = off[near]
        rows.append(
            Measurement(
                dimension=dimension,
                measured=float(np.quantile(size, 0.95)),
                note=f"95 % of {len(size)} points; the largest {1000 * size.max():.0f} um",
            )
        )
    return rows

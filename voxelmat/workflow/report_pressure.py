"""A pressure map laid on the part, with its resultant, its centre and the frame of the mat."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes

from voxelmat.model.loadcase import PressureMap
from voxelmat.model.part import Part
from voxelmat.model.region import parse_side
from voxelmat.model.surface import visible_from
from voxelmat.units import number
from voxelmat.workflow.report_canvas import (
    AXES,
    Picture,
    colour_bar,
    figure,
    mm_axes,
    plane_extent,
    png,
)
from voxelmat.workflow.report_tables import expectation

__all__ = ["pressure_picture"]


def pressure_picture(part: Part, load: PressureMap) -> Picture:
    """The map laid on the part, with its resultant and its centre, seen from its side."""
    axis, side = parse_side(load.side, load.region.name)
    horizontal, vertical = (a for a in range(3) if a != axis)
    faces = load.region.faces(part)
    faces = faces.select(visible_from(part, faces, axis, side))
    laid = np.full(part.grid.shape, np.nan)
    laid[tuple(faces.voxel.T)] = 1e3 * load.at(faces.centre)
    loaded = np.isfinite(laid).any(axis=axis)
    on_part = np.where(loaded, np.nanmax(np.where(np.isfinite(laid), laid, 0.0), axis=axis), 0.0).T
    span = [u - o for u, o in zip(part.grid.upper, part.grid.origin, strict=True)]
    height = min(7.5, 7.2 * span[vertical] / span[horizontal] + 1.6)
    fig = figure(9.0, height)
    ax = fig.add_axes((0.62 / 9, 0.5 / height, 7.2 / 9, 1 - 0.9 / height))
    bar = fig.add_axes((8.05 / 9, 0.5 / height, 0.16 / 9, 1 - 0.9 / height))
    extent = plane_extent(part.grid, horizontal, vertical)
    seen = part.solid.any(axis=axis).T
    ax.imshow(
        np.repeat(np.where(seen, 0.85, 1.0)[..., None], 3, axis=2),
        origin="lower",
        extent=extent,
        interpolation="nearest",
    )
    top = max(float(1e3 * load.values.max()), 1e-9)
    image = ax.imshow(
        np.ma.masked_less_equal(on_part, 0.0),
        origin="lower",
        extent=extent,
        interpolation="nearest",
        cmap="viridis",
        vmin=0.0,
        vmax=top,
    )
    _mat_frame(ax, load, horizontal, vertical)
    words = f"{number(load.resultant)} N"
    if load.resultant > 0:
        u, v = load.centre
        ax.plot([u], [v], marker="P", markersize=11, color="white", markeredgecolor="black")
        words += f", centre at {AXES[horizontal]} = {number(u)}, {AXES[vertical]} = {number(v)} mm"
    mm_axes(ax, horizontal, vertical, f"seen from {load.side}: {words}")
    if (axis == 1) == (side > 0):
        ax.invert_xaxis()  # so that the viewer's right is on the right
    colour_bar(fig, bar, image, "pressure, kPa")
    expected = (
        f" Against that, {expectation(load.resultant, load.expected_force)}."
        if load.expected_force is not None
        else ""
    )
    return Picture(
        png=png(fig),
        alt=f"Pressure map laid on the part, seen from {load.side}: {words}.",
        caption=f"Pressure map {load.source_file} laid on the part (grey), resultant along "
        f"{AXES[axis]} {words} (the cross). The dashed frame is the mat with its first cell "
        f"marked.{expected}",
    )


def _mat_frame(ax: Axes, load: PressureMap, horizontal: int, vertical: int) -> None:
    """The edge of the mat, dashed, and a small square on row 1, column 1."""
    rows, columns = load.values.shape
    low: dict[int, float] = {}
    high: dict[int, float] = {}
    first = dict(zip((horizontal, vertical), load.first_cell, strict=True))
    for direction, step, count in (
        (load.column_direction, load.cell[0], columns),
        (load.row_direction, load.cell[1], rows),
    ):
        a, sense = parse_side(direction, load.region.name)
        ends = (first[a] - 0.5 * sense * step, first[a] + sense * (count - 0.5) * step)
        low[a], high[a] = min(ends), max(ends)
    x = [low[horizontal], high[horizontal], high[horizontal], low[horizontal], low[horizontal]]
    y = [low[vertical], low[vertical], high[vertical], high[vertical], low[vertical]]
    ax.plot(x, y, "--", color="#555555", linewidth=0.8)
    ax.plot([first[horizontal]], [first[vertical]], "s", color="#D55E00", markersize=5)
    ax.annotate(
        "row 1, column 1",
        (first[horizontal], first[vertical]),
        xytext=(0, 9),
        textcoords="offset points",
        fontsize=7,
        ha="center",
        bbox={"boxstyle": "round,pad=0.2", "fc": "white", "ec": "none"},
    )

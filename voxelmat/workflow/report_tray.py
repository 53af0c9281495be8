"""A picture of a laid-out tray from above: the whole tray, and the used part of it with names."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.colors import ListedColormap
from matplotlib.patches import Patch, Rectangle
from numpy.typing import NDArray

from voxelmat.io.bigpart import AnyPart, z_slabs
from voxelmat.printing.job import PlacedPart
from voxelmat.printing.support import outline_values
from voxelmat.printing.tray import Tray
from voxelmat.workflow.report_canvas import Picture, figure, mm_axes, png
from voxelmat.workflow.report_profile import draw_tray

__all__ = ["tray_picture"]

_COLOURS = {"part": "#56B4E9", "mark": "#E69F00", "coupon": "#BBBBBB"}
_WORDS = {"part": "part", "mark": "tag with its mark", "coupon": "witness coupon"}
_ORIGIN, _INK = "#D55E00", "#222222"
_WIDTH = 11.5  # inches
_NAMED = 60  # names are drawn for so many; beyond that they would cover each other


def _shadow(item: PlacedPart) -> tuple[NDArray[np.bool_], tuple[float, float, float, float]]:
    """Voxels of the part seen from above, ``[row, column]`` up and along x, and their extent."""
    part, raster = item.part, item.raster
    turn = np.array(raster.rotation)
    axes = [int(np.flatnonzero(row)[0]) for row in turn]
    seen = _seen_along(part, axes[2])
    others = [a for a in range(3) if a != axes[2]]
    if others != [axes[0], axes[1]]:
        seen = seen.T
    for n in (0, 1):
        if turn[n, axes[n]] < 0:
            seen = np.flip(seen, axis=n)
    corners = np.stack([turn @ part.grid.origin, turn @ part.grid.upper])
    low = corners.min(axis=0) + raster.translation
    high = corners.max(axis=0) + raster.translation
    return seen.T, (float(low[0]), float(high[0]), float(low[1]), float(high[1]))


def _seen_along(part: AnyPart, axis: int) -> NDArray[np.bool_]:
    """Which columns of voxels along a part axis hold something printed."""
    shape = [n for a, n in enumerate(part.grid.shape) if a != axis]
    seen = np.zeros(shape, dtype=np.bool_)
    printed = part.printed_labels()
    for first, last in z_slabs(part):
        index = (slice(None), slice(None), slice(first, last))
        inside = (
            outline_values(
                printed,
                part.labels[index],
                None if part.distance is None else part.distance[index],
                None if part.occupancy is None else part.occupancy[index],
            )
            < 0
        )
        if axis == 2:
            seen |= inside.any(axis=2)
        else:
            seen[:, first:last] |= inside.any(axis=axis)
    return seen


def _draw(ax: Axes, tray: Tray, *, named: bool) -> None:
    for item in tray.placed:
        x, y, w, h = tray.box_mm(item)
        colour = _COLOURS[item.kind]
        face = "none" if named else colour
        ax.add_patch(
            Rectangle((x, y), w, h, linewidth=0.6, edgecolor=_INK, facecolor=face, zorder=3)
        )
        if named:
            seen, extent = _shadow(item)
            ax.imshow(
                seen, extent=extent, origin="lower", interpolation="nearest",
                cmap=ListedColormap(["#FFFFFF00", colour]), vmin=0, vmax=1,
            )  # fmt: skip


def _names(ax: Axes, tray: Tray) -> None:
    """Names inside the boxes, as large as they fit, between readable limits."""
    things = [p for p in tray.placed if p.kind != "mark"]
    if len(things) > _NAMED:
        things = [p for p in things if p.kind == "part"][:_NAMED]
    left, right = ax.get_xlim()
    points = ax.get_position().width * _WIDTH * 72 / (right - left)
    for item in things:
        x, y, w, h = tray.box_mm(item)
        upright = h > 1.5 * w
        room = (h if upright else w) * points
        size = float(np.clip(room / (0.62 * max(len(item.name), 1)), 4.5, 9))
        ax.text(
            x + w / 2, y + h / 2, item.name, fontsize=size, ha="center", va="center",
            color=_INK, rotation=90 if upright else 0, clip_on=True, zorder=5,
        )  # fmt: skip


def _texts(ax: Axes, tray: Tray) -> None:
    """The cells of each mark that reads from above."""
    for mark in tray.marks:
        if abs(mark.right_mm[2]) + abs(mark.up_mm[2]) > 0:
            continue
        cells = mark.cells
        step = (np.array(mark.right_mm) + np.array(mark.up_mm))[:2]
        for c, r in np.argwhere(cells):
            centre = np.array(mark.origin_mm)[:2] + c * np.array(mark.right_mm)[:2]
            centre = centre + r * np.array(mark.up_mm)[:2]
            ax.add_patch(
                Rectangle(
                    tuple(centre - step / 2),
                    step[0],
                    step[1],
                    facecolor=_INK,
                    edgecolor="none",
                    zorder=4,
                )
            )


def tray_picture(tray: Tray) -> Picture:
    """Draw a tray from above, at true aspect.

    Parameters
    ----------
    tray : Tray

    Returns
    -------
    Picture
        Left the whole tray with the corner at which images begin, right the used part of it.
    """
    profile = tray.profile
    width, depth, _ = profile.tray_size
    boxes = np.array([tray.box_mm(p) for p in tray.placed])
    low = boxes[:, :2].min(axis=0)
    high = (boxes[:, :2] + boxes[:, 2:]).max(axis=0)
    edge = 0.04 * float((high - low).max())
    used = float(np.clip((high - low + 2 * edge)[1] / (high - low + 2 * edge)[0], 0.5, 1.4))
    fig = figure(_WIDTH, float(np.clip(6.4 * used + 1.2, 4.6, 9.5)))
    whole = fig.add_axes((0.06, 0.14, 0.27, 0.76))
    near = fig.add_axes((0.41, 0.14, 0.57, 0.76))
    draw_tray(whole, profile)
    _draw(whole, tray, named=False)
    right, back = profile.origin_corner.endswith("right"), profile.origin_corner.startswith("back")
    whole.plot(
        [width if right else 0], [depth if back else 0], marker="o", markersize=11,
        markerfacecolor="none", markeredgecolor=_ORIGIN, zorder=5,
    )  # fmt: skip
    mm_axes(whole, 0, 1, f"{profile.name}, from above; ring: images begin")
    mm_axes(near, 0, 1, _title(tray))
    _draw(near, tray, named=True)
    near.set_xlim(low[0] - edge, high[0] + edge)  # pictures have set their own
    near.set_ylim(low[1] - edge, high[1] + edge)
    _texts(near, tray)
    _names(near, tray)
    kinds = [k for k in _COLOURS if any(p.kind == k for p in tray.placed)]
    fig.legend(
        handles=[Patch(facecolor=_COLOURS[k], edgecolor=_INK, label=_WORDS[k]) for k in kinds],
        loc="lower right", ncols=3, fontsize=8, frameon=False,
    )  # fmt: skip
    names = ", ".join(p.name for p in tray.parts[:20])
    return Picture(
        png=png(fig),
        alt=f"Tray {tray.name} from above with {len(tray.parts)} parts: {names}.",
        caption=f"Tray {tray.name} on {profile.name} from above, x to the right, y to the back. "
        f"Images begin in the {profile.origin_corner} corner (ring), rows along "
        f"{profile.row_direction}.",
    )


def _title(tray: Tray) -> str:
    job = f", job {tray.job_number}" if tray.job_number else ""
    return (
        f"{tray.name}{job}: {len(tray.parts)} parts, {tray.spacing_mm:g} mm apart, "
        f"{tray.height_mm:.3g} mm high"
    )

"""Pictures of the part and of its layers: cut open, in space, and as laid on the tray."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.patches import Patch
from numpy.typing import NDArray

from voxelmat.model.part import Part
from voxelmat.units import number
from voxelmat.workflow.colours import palette_rgb
from voxelmat.workflow.depth import Shot, draw_faces, faces_of_cut
from voxelmat.workflow.report_canvas import (
    AXES,
    Picture,
    figure,
    legend,
    legend_patches,
    mm_axes,
    plane_extent,
    plane_of,
    png,
    short,
)
from voxelmat.workflow.report_data import StackSummary

__all__ = ["blend_picture", "cut_picture", "layer_pictures", "middle", "space_picture"]


def middle(part: Part) -> tuple[int, int, int]:
    """The voxel in the middle of the part's bounding box."""
    found = []
    for axis in range(3):
        others = tuple(a for a in range(3) if a != axis)
        layers = np.flatnonzero(part.solid.any(axis=others))
        found.append(int(layers[0] + layers[-1]) // 2 if len(layers) else 0)
    return found[0], found[1], found[2]


def _cut_rgb(part: Part, axis: int, index: int) -> NDArray[np.float64]:
    """Colours of a cut; a voxel that is partly full fades to the white of the paper."""
    colour = palette_rgb(part)[plane_of(part.labels, axis, index)] / 255.0
    fill = plane_of(part.fill, axis, index)[..., None].astype(float)
    return np.asarray(1.0 - fill * (1.0 - colour))


def _cut_axes(part: Part) -> tuple[Figure, dict[int, Axes]]:
    """Three axes at one scale: seen along y top left, along x to its right, along z below."""
    grid = part.grid
    lx, ly, lz = (u - o for u, o in zip(grid.upper, grid.origin, strict=True))
    left, right, gap, top, bottom, width = 0.62, 0.25, 0.85, 0.34, 0.95, 9.0
    scale = (width - left - right - gap) / (lx + ly)
    scale = min(scale, 7.0 / (lz + ly))
    gap_v = 0.78
    height = top + (lz + ly) * scale + gap_v + bottom
    fig = figure(width, height)

    def place(x: float, y: float, w: float, h: float) -> Axes:
        return fig.add_axes((x / width, y / height, w * scale / width, h * scale / height))

    upper = bottom + ly * scale + gap_v
    return fig, {
        1: place(left, upper, lx, lz),
        0: place(left + lx * scale + gap, upper, ly, lz),
        2: place(left, bottom, lx, ly),
    }


def cut_picture(part: Part) -> Picture:
    """Three cuts through the middle, in the colours of the materials."""
    at = middle(part)
    fig, axes = _cut_axes(part)
    places = []
    for axis, ax in axes.items():
        horizontal, vertical = (a for a in range(3) if a != axis)
        where = part.grid.centres()[axis][at[axis]]
        ax.imshow(
            _cut_rgb(part, axis, at[axis]),
            origin="lower",
            extent=plane_extent(part.grid, horizontal, vertical),
            interpolation="nearest",
        )
        mm_axes(ax, horizontal, vertical, f"cut at {AXES[axis]} = {short(where)} mm")
        places.append(f"{AXES[axis]} = {short(where)} mm")
    patches = legend_patches(part)
    legend(fig, patches)
    blended = any(len(b.fractions) > 1 for b in part.palette)
    return Picture(
        png=png(fig),
        alt=f"Three cuts through the part, at {', '.join(places)}, coloured by material.",
        caption="The part cut through its middle along each axis, all at one scale."
        + (" Blends have a colour between those of their resins." if blended else ""),
    )


def blend_picture(part: Part) -> Picture | None:
    """How much of the stiffest blended resin is where; None where nothing is blended."""
    blends = [b for b in part.palette if len(b.fractions) > 1]
    if not blends:
        return None
    names = {n for b in blends for n, _ in b.fractions}
    stiff = max(names, key=lambda n: part.resin(n).E.value)
    share = 100.0 * np.array([b.fraction(stiff) for b in part.palette])
    soft = names - {stiff}
    # Pure regions of other resins are no part of the grading and stay grey.
    graded = np.array(
        [not b.is_empty and {n for n, _ in b.fractions} <= names for b in part.palette]
    ) & (share < 100.0)
    at = middle(part)
    fig, axes = _cut_axes(part)
    top = float(share[graded].max())
    for axis, ax in axes.items():
        horizontal, vertical = (a for a in range(3) if a != axis)
        labels = plane_of(part.labels, axis, at[axis])
        extent = plane_extent(part.grid, horizontal, vertical)
        other = np.where((labels > 0) & ~graded[labels], 0.8, 1.0)
        ax.imshow(np.repeat(other[..., None], 3, axis=2), origin="lower", extent=extent)
        image = ax.imshow(
            np.ma.masked_where(~graded[labels], share[labels]),
            origin="lower",
            extent=extent,
            interpolation="nearest",
            cmap="cividis",
            vmin=0.0,
            vmax=top,
        )
        where = part.grid.centres()[axis][at[axis]]
        mm_axes(ax, horizontal, vertical, f"cut at {AXES[axis]} = {short(where)} mm")
    box = axes[0].get_position()
    below = axes[2].get_position()
    bar = fig.colorbar(
        image,
        cax=fig.add_axes((box.x0, below.y0 + below.height * 0.5, box.width, 0.03)),
        orientation="horizontal",
    )
    bar.set_label(f"{stiff}, % by volume", fontsize=8)
    bar.ax.tick_params(labelsize=8)
    return Picture(
        png=png(fig),
        alt=f"Three cuts through the part, coloured by the share of {stiff} in the blend, "
        f"from 0 to {number(top)} % by volume.",
        caption=f"How the blend is graded: share of {stiff} mixed into {', '.join(sorted(soft))}. "
        "Grey: not part of the grading.",
    )


def _dress(ax: Axes, shot: Shot, title: str) -> None:
    """Show a shot without a frame, with arrows for the axes and a scale bar."""
    rows, columns = shot.rgb.shape[:2]
    ax.imshow(shot.rgb, interpolation="antialiased")
    ax.set_title(title, fontsize=9, loc="left")
    ax.set_axis_off()
    axes = shot.camera.axes()
    x0, y0 = 0.06 * columns, 1.02 * rows
    reach = 0.06 * columns
    for axis in range(3):
        dx, dy = reach * float(axes[0, axis]), -reach * float(axes[1, axis])
        arrow = {"arrowstyle": "-|>", "color": "black", "linewidth": 1}
        ax.annotate(
            "", xy=(x0 + dx, y0 + dy), xytext=(x0, y0), annotation_clip=False, arrowprops=arrow
        )
        ax.text(x0 + 1.3 * dx, y0 + 1.3 * dy, AXES[axis], fontsize=9, ha="center", va="center")
    span = columns * shot.pixel
    bar = max((b for b in (1, 2, 5, 10, 20, 50, 100, 200) if b <= 0.25 * span), default=0.2 * span)
    x1, y = 0.97 * columns, 1.05 * rows
    ax.plot(
        [x1 - bar / shot.pixel, x1],
        [y, y],
        color="black",
        linewidth=2,
        solid_capstyle="butt",
        clip_on=False,
    )
    ax.text(
        x1 - 0.5 * bar / shot.pixel,
        y - 0.012 * columns,
        f"{bar:g} mm",
        fontsize=8,
        ha="center",
        va="bottom",
    )
    ax.set_xlim(0, columns)
    ax.set_ylim(rows, 0)


def _nothing() -> Picture:
    """What stands where a part without material would be shown."""
    fig = figure(9.0, 1.2)
    words = "No material: the part has no voxel inside its outline."
    fig.text(0.5, 0.5, words, ha="center", va="center", fontsize=11)
    return Picture(png=png(fig), alt=words, caption=words)


def space_picture(part: Part) -> Picture:
    """The part in space: whole, and with the half nearest to the viewer taken away."""
    rgb = palette_rgb(part)
    away = np.ones(part.grid.shape, dtype=bool)
    away[:, : middle(part)[1], :] = False
    shots = []
    whole, _ = faces_of_cut(part, np.ones(part.grid.shape, dtype=bool))
    if not len(whole):
        return _nothing()
    for faces in (whole, faces_of_cut(part, away)[0]):
        colours = rgb[part.labels[tuple(faces.voxel.T)]]
        shots.append(draw_faces(faces, colours, part.grid.spacing, width=760, around=whole))
    tall = max(s.rgb.shape[0] / s.rgb.shape[1] for s in shots)
    fig = figure(9.0, 4.3 * tall * 1.16 + 0.75)
    for column, (shot, title) in enumerate(zip(shots, ("whole", "cut open"), strict=True)):
        ax = fig.add_axes((0.01 + 0.5 * column, 0.12, 0.48, 0.8))
        _dress(ax, shot, title)
    patches = legend_patches(part)
    legend(fig, patches)
    return Picture(
        png=png(fig),
        alt="The part in space, whole on the left, cut open along its length on the right, "
        "coloured by material.",
        caption="The part as the computation sees it, one small cube a voxel, shaded by its true "
        "outline.",
    )


def layer_pictures(stack: StackSummary, part: Part) -> list[Picture]:
    """Some layers of the stack at true aspect."""
    colours = {p.get_label(): p.get_facecolor()[:3] for p in legend_patches(part)}
    found = []
    for layer in stack.layers:
        table = np.ones((len(stack.resins) + 1, 3))
        for row, name in enumerate(stack.resins):
            table[row + 1] = colours.get(name, (0.6, 0.6, 0.6))
        (width, height), (x0, y0) = layer.size_mm, layer.corner_mm
        inches = min(9.0, 1.0 + 6.0 * width / height)
        tall = max(2.2, (inches - 0.8) * height / width + 1.2)
        fig = figure(inches, tall)
        ax = fig.add_axes((0.62 / inches, 0.8 / tall, 1 - 0.8 / inches, 1 - 1.2 / tall))
        ax.imshow(table[layer.codes], extent=(x0, x0 + width, y0, y0 + height))
        title = f"layer {layer.number}, {number(layer.height_mm)} mm over the tray"
        mm_axes(ax, 0, 1, title)
        ax.set_xlabel("raster x, mm", fontsize=8)
        ax.set_ylabel("raster y, mm", fontsize=8)
        names = [
            Patch(facecolor=table[row + 1], edgecolor="#333333", linewidth=0.5, label=name)
            for row, name in enumerate(stack.resins)
        ]
        legend(fig, names)
        found.append(
            Picture(
                png=png(fig),
                alt=f"{title}: which resin is laid at each site.",
                caption=f"L{title[1:]}, at true aspect. {layer.note}".strip(),
            )
        )
    return found

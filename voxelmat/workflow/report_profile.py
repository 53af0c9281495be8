"""A picture of a print profile: the tray from above, its axes, and how images lie on it."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.patches import Rectangle

from voxelmat.model.profile import PrintProfile
from voxelmat.workflow.report_canvas import Picture, figure, mm_axes, png

__all__ = ["draw_tray", "profile_picture", "profile_rows"]

_ROW, _NEXT, _AXIS = "#D55E00", "#0072B2", "#333333"


def profile_rows(profile: PrintProfile) -> list[tuple[str, str]]:
    """What the picture says beside the drawing: label and text."""
    image = profile.image
    tray = " x ".join(f"{v:g}" for v in profile.tray_size)
    rows = [
        ("tray x, y, z", f"{tray} mm"),
        ("parts stand in", f"{_span(profile.room[0])}, {_span(profile.room[1])} mm (dashed)"),
        *(
            (f"pitch {axis}", f"{_um(pitch)} µm")
            for axis, pitch in zip(("x", "y", "z (layer)"), profile.pitch, strict=True)
        ),
        ("origin of images", f"{profile.origin_corner} corner (ring)"),
        ("images", f"{image.kind}, {profile.polarity}"),
        ("first row of a file", _first_row(profile)),
        ("file or page 0", "lowest layer" if image.layer_order == "up" else "highest layer"),
    ]
    if image.kind == "tiff pages":
        rows.append(("compression", f"{image.compression}, {image.bit_order} in a byte"))
    if image.pad_to != (1, 1):
        rows.append(
            ("filled up to", f"multiples of {image.pad_to[0]} rows, {image.pad_to[1]} columns")
        )
    if image.mirrored_passes:
        swath = profile.process.swath_mm
        rows.append(("mirrored along x", f"every second swath of {swath:g} mm (blue)"))
    bias = ", ".join(f"{b:g}" for b in profile.bias)
    rows.append(("bias x, y, z", f"{bias} mm a side" if any(profile.bias) else "none"))
    support = profile.support_policy
    if profile.support_channel:
        support += f", in channel {profile.support_channel}"
    rows.append(("support", support))
    names = [f"{c}: {r or 'any resin'}" for c, r in profile.channels.items()]
    shown = names if len(names) <= 8 else [*names[:7], f"and {len(names) - 7} more"]
    return rows + [("channels" if n == 0 else "", text) for n, text in enumerate(shown)]


def _span(ends: tuple[float, float]) -> str:
    return f"{ends[0]:g} to {ends[1]:g}"


def _um(pitch: Fraction) -> str:
    """A pitch in micrometres, exact where it is a fraction."""
    um = pitch * 1000
    return str(um) if um.denominator == 1 else f"{float(um):.3f} ({um})"


def _first_row(profile: PrintProfile) -> str:
    near = profile.image.row_order == "down"
    return f"{'next to' if near else 'farthest from'} the origin corner"


def profile_picture(profile: PrintProfile) -> Picture:
    """Draw the tray from above, at true aspect, with the image origin and its directions."""
    width, depth, _ = profile.tray_size
    drawn = 5.2
    height = float(np.clip(drawn * depth / width + 1.3, 4.2, 7.5))
    fig = figure(9.6, height)
    ax = fig.add_axes((0.08, 0.13, drawn / 9.6, 1 - 1.05 / height - 0.02))
    draw_tray(ax, profile)
    _images(ax, profile)
    made = " (invented: no real printer)" if profile.invented else ""
    mm_axes(ax, 0, 1, f"{profile.name}{made}: the tray seen from above")
    _beside(fig, profile)
    corner, row = profile.origin_corner, profile.row_direction
    words = (
        f"images begin in the {corner} corner of the tray; pixels of a row follow {row}, rows "
        f"follow {'y' if row == 'x' else 'x'}"
    )
    return Picture(
        png=png(fig),
        alt=f"Tray of print profile {profile.name} seen from above: {words}.",
        caption=f"Print profile {profile.name}: {words}. Images show only the window that the "
        "parts take, in the same directions. z goes up, towards the viewer.",
    )


def draw_tray(ax: Axes, profile: PrintProfile) -> None:
    """The tray, the part of it that can be used, and the axes at the front left corner."""
    width, depth, _ = profile.tray_size
    (left, right), (front, back), _ = profile.room
    ax.add_patch(Rectangle((0, 0), width, depth, facecolor="#F2F2F2", edgecolor=_AXIS))
    ax.add_patch(
        Rectangle(
            (left, front), right - left, back - front,
            facecolor="white", edgecolor="#888888", linestyle="--", linewidth=0.8,
        )
    )  # fmt: skip
    if profile.image.mirrored_passes:
        _swaths(ax, profile)
    long = 0.16 * max(width, depth)
    for end, name, place in (
        ((long, 0), "x", (long, -0.3 * long)),
        ((0, long), "y", (-0.3 * long, long)),
    ):
        ax.annotate(
            "", end, (0, 0), arrowprops={"arrowstyle": "-|>", "color": _AXIS, "linewidth": 1.8}
        )
        ax.text(
            place[0],
            place[1],
            name,
            fontsize=10,
            weight="bold",
            ha="center",
            va="center",
            color=_AXIS,
        )
    for (x, y), side, turn in (
        ((width / 2, 0), "front", 0), ((width / 2, depth), "back", 0),
        ((0, depth / 2), "left", 90), ((width, depth / 2), "right", 90),
    ):  # fmt: skip
        ax.text(
            x, y, side, fontsize=8, ha="center", va="center", rotation=turn, color="#444444",
            bbox={"boxstyle": "round,pad=0.2", "fc": "white", "ec": "none"},
        )  # fmt: skip
    edge = 0.09 * max(width, depth)
    ax.set_xlim(-edge, width + edge)
    ax.set_ylim(-edge, depth + edge)


def _swaths(ax: Axes, profile: PrintProfile) -> None:
    """Grey bands for the swaths that are reversed."""
    width, depth, _ = profile.tray_size
    swath = profile.process.swath_mm
    front = profile.origin_corner.startswith("front")
    for n in range(1, int(np.ceil(depth / swath)), 2):
        low, high = n * swath, min((n + 1) * swath, depth)
        y = low if front else depth - high
        ax.add_patch(Rectangle((0, y), width, high - low, facecolor="#DDE6F0", edgecolor="none"))


def _images(ax: Axes, profile: PrintProfile) -> None:
    """First pixel, the way along a row, and the way from row to row."""
    width, depth, _ = profile.tray_size
    vertical, horizontal = profile.origin_corner.split()
    sign_x, sign_y = (1 if horizontal == "left" else -1), (1 if vertical == "front" else -1)
    inset = 0.03 * max(width, depth)
    x = inset if sign_x > 0 else width - inset
    y = inset if sign_y > 0 else depth - inset
    ax.plot(
        [0 if sign_x > 0 else width], [0 if sign_y > 0 else depth],
        marker="o", markersize=11, markerfacecolor="none", markeredgecolor=_ROW, zorder=5,
    )  # fmt: skip
    along = {"x": (sign_x, 0), "y": (0, sign_y)}
    row = along[profile.row_direction]
    following = along["y" if profile.row_direction == "x" else "x"]
    far = {(1, 0): width, (0, 1): depth}
    step = (abs(following[0]), abs(following[1]))
    upwards = profile.image.row_order == "up"
    if upwards:  # rows are stored from the far side back to the corner
        reach = far[step] - 2 * inset
        x, y = x + following[0] * reach, y + following[1] * reach
        following = (-following[0], -following[1])
    ax.plot([x], [y], marker="s", markersize=9, color=_ROW, markeredgecolor="black", zorder=5)
    for number_of in range(3):
        gap = 0.05 * number_of * min(width, depth)
        start = (x + following[0] * gap, y + following[1] * gap)
        long = 0.45 * (width if row[0] else depth)
        end = (start[0] + row[0] * long, start[1] + row[1] * long)
        style = {"arrowstyle": "-|>", "color": _ROW, "linewidth": 1.4, "alpha": 1 - 0.3 * number_of}
        ax.annotate("", end, start, arrowprops=style, zorder=4)
    long = 0.45 * (width if following[0] else depth)
    end = (x + following[0] * long, y + following[1] * long)
    ax.annotate(
        "",
        end,
        (x, y),
        arrowprops={"arrowstyle": "-|>", "color": _NEXT, "linewidth": 1.4},
        zorder=4,
    )
    middle = (0.5 * width, 0.5 * depth)
    for words, colour, shift in (
        ("■ first pixel of a file", _ROW, 0.06),
        (f"→ along a row ({profile.row_direction})", _ROW, 0.0),
        ("→ from row to row in the file", _NEXT, -0.06),
    ):
        ax.text(
            middle[0], middle[1] + shift * depth, words, fontsize=8, color=colour, ha="center",
            bbox={"boxstyle": "round,pad=0.15", "fc": "white", "ec": "none", "alpha": 0.85},
            zorder=6,
        )  # fmt: skip


def _beside(fig: Figure, profile: PrintProfile) -> None:
    """The rows of words at the right."""
    rows = profile_rows(profile)
    step = min(0.055, 0.86 / len(rows))
    for n, (label, text) in enumerate(rows):
        y = 0.93 - n * step
        fig.text(0.655, y, label, fontsize=8, color="#555555", va="top")
        fig.text(0.775, y, text, fontsize=8, color="black", va="top", wrap=True)

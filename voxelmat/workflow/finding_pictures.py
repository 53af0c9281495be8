"""A picture of the spot that a finding names: the layer there, with a ring round the place."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.patches import Circle, Patch
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.finding import Finding
from voxelmat.model.part import Part
from voxelmat.printing.readback import Stack
from voxelmat.printing.view import PartView, part_view
from voxelmat.units import number
from voxelmat.workflow.colours import OKABE_ITO, resin_colours
from voxelmat.workflow.report_canvas import Picture, figure, legend, png, short

__all__ = ["finding_picture", "finding_pictures"]

_ACROSS_MM = 5.0  # of the crop
_BARS = (0.1, 0.2, 0.5, 1, 2, 5)
_SUPPORT = "#C9C9C9"
_RING = "#C8102E"


def finding_pictures(
    findings: Sequence[Finding], stack: Stack, part: Part | None = None, *, most: int = 12
) -> dict[int, Picture]:
    """Pictures of the findings that have a place, by their number in the list.

    Parameters
    ----------
    findings : sequence of Finding
        Worst first, as preflight gives them.
    stack : Stack
    part : Part, optional
        Its resins' own colours are taken.
    most : int
        Pictures that are made at most, so that a report stays readable.
    """
    found: dict[int, Picture] = {}
    for n, finding in enumerate(findings):
        if finding.place_mm is not None and len(found) < most:
            found[n] = finding_picture(finding, stack, part)
    return found


def finding_picture(finding: Finding, stack: Stack, part: Part | None = None) -> Picture:
    """The layer at a finding's place at true pixel aspect, and a cut upwards beside it.

    Parameters
    ----------
    finding : Finding
        With a place.
    stack : Stack
        Files that cannot be read show as empty.
    part : Part, optional
        Its resins' own colours are taken.

    Raises
    ------
    InputError
        If the finding has no place.
    """
    if finding.place_mm is None:
        raise InputError(f"The finding '{finding.code}' has no place to show.")
    name = finding.part or (stack.parts[0].name if len(stack.parts) > 1 else None)
    view = part_view(stack, name)
    at = np.rint(view.to_pixels(np.array([finding.place_mm]))[0]).astype(int)
    at = np.clip(at, 0, np.array(view.shape) - 1)
    pitch = np.linalg.norm(view.step, axis=0)  # of layers, rows, columns
    half = np.maximum(2, np.rint(_ACROSS_MM / 2 / pitch)).astype(int)
    table, patches = _colours(stack, part)
    flat, low = _plane(view, at, half)
    tall, low_tall = _cut(view, at, half)
    fig = figure(8.2, 4.4)
    left, right = fig.add_axes((0.04, 0.17, 0.45, 0.76)), fig.add_axes((0.53, 0.17, 0.45, 0.76))
    _show(left, table[flat], (pitch[1], pitch[2]), (at[1] - low[0], at[2] - low[1]))
    left.set_title(f"layer {at[0] + view.first[0]}, seen from above", fontsize=9, loc="left")
    _show(
        right, table[tall[::-1]], (pitch[0], pitch[2]),
        (len(tall) - 1 - (at[0] - low_tall[0]), at[2] - low_tall[1]),
    )  # fmt: skip
    right.set_title(f"cut upwards through row {at[1] + view.first[1]}", fontsize=9, loc="left")
    legend(fig, patches)
    place = ", ".join(short(v) for v in finding.place_mm)
    return Picture(
        png=png(fig),
        alt=f"{finding.code} at {place} mm: which resin is laid round the place, in the layer and "
        "in a cut upwards; a ring marks the place.",
        caption=f"{finding.message} At {place} mm{f' of {finding.part}' if finding.part else ''}, "
        f"{number(flat.shape[1] * pitch[2])} mm across, rows of the image from left to right, "
        "pixels at their true aspect.",
    )


def _colours(stack: Stack, part: Part | None) -> tuple[NDArray[np.float64], list[Patch]]:
    """Colour of every channel number plus one, row 0 empty, and the names that occur."""
    own = {} if part is None else resin_colours(part)
    free = [c for c in OKABE_ITO if c not in own.values()]
    table = np.ones((len(stack.channels) + 1, 3))
    patches: list[Patch] = []
    for row, channel in enumerate(stack.channels, start=1):
        text = _SUPPORT if channel.role == "support" else own.get(channel.resin, "")
        if not text:
            text = own[channel.resin] = free.pop(0) if free else "#777777"
        table[row] = [int(text[a : a + 2], 16) / 255 for a in (1, 3, 5)]
        if all(p.get_label() != channel.resin for p in patches):
            patches.append(
                Patch(facecolor=text, edgecolor="#333333", linewidth=0.5, label=channel.resin)
            )
    patches.append(Patch(facecolor="white", edgecolor="#333333", linewidth=0.5, label="empty"))
    return table, patches


def _numbers(view: PartView, layer: int) -> NDArray[np.uint8]:
    """Channel number plus one of every site; what cannot be read is empty."""
    bits = view.stack.files.examine(layer + view.first[0]).bits
    planes = np.unpackbits(bits, axis=2, count=view.stack.raster.image_shape[2])
    site = np.zeros(planes.shape[1:], dtype=np.uint8)
    for m in range(len(planes) - 1, -1, -1):
        site[planes[m] > 0] = m + 1
    (_, row, column), (_, rows, columns) = view.first, view.shape
    return site[row : row + rows, column : column + columns]


def _span(at: int, half: int, count: int) -> tuple[int, int]:
    """First and last of a crop round `at` that stays as wide as it can at the rim."""
    size = min(2 * half + 1, count)
    first = min(max(at - half, 0), count - size)
    return first, first + size


def _plane(
    view: PartView, at: NDArray[np.int64], half: NDArray[np.int64]
) -> tuple[NDArray[np.uint8], tuple[int, int]]:
    """The crop of one layer and its first row and column."""
    rows = _span(int(at[1]), int(half[1]), view.shape[1])
    columns = _span(int(at[2]), int(half[2]), view.shape[2])
    return _numbers(view, int(at[0]))[slice(*rows), slice(*columns)], (rows[0], columns[0])


def _cut(
    view: PartView, at: NDArray[np.int64], half: NDArray[np.int64]
) -> tuple[NDArray[np.uint8], tuple[int, int]]:
    """The crop of one row through the layers, ``[layer, column]``, and its first of both."""
    layers = _span(int(at[0]), int(half[0]), view.shape[0])
    columns = _span(int(at[2]), int(half[2]), view.shape[2])
    lines = [_numbers(view, k)[int(at[1]), slice(*columns)] for k in range(*layers)]
    return np.stack(lines), (layers[0], columns[0])


def _show(
    ax: Axes, rgb: NDArray[np.float64], pitch: tuple[float, float], at: tuple[int, int]
) -> None:
    """One crop in millimetres with a ring and a bar."""
    rows, columns = rgb.shape[:2]
    height, width = rows * pitch[0], columns * pitch[1]
    ax.imshow(rgb, extent=(0, width, height, 0), interpolation="nearest", aspect="equal")
    x, y = (at[1] + 0.5) * pitch[1], (at[0] + 0.5) * pitch[0]
    size = 0.09 * max(width, height)
    for colour, line in (("white", 4.0), (_RING, 2.0)):
        ax.add_patch(Circle((x, y), size, fill=False, edgecolor=colour, linewidth=line))
    bar = max((b for b in _BARS if b <= 0.35 * width), default=_BARS[0])
    low = height * 1.07
    ax.plot([width - bar, width], [low, low], color="black", linewidth=2.5, clip_on=False)
    ax.text(width - bar - 0.02 * width, low, f"{bar:g} mm", fontsize=8, ha="right", va="center")
    ax.set_xlim(0, width)
    ax.set_ylim(height, 0)
    ax.set_anchor("N")
    ax.set_xticks([])
    ax.set_yticks([])

"""What is written onto a picture in space: axes, a bar for the scale, notes, a measured line."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from PIL import Image, ImageDraw, ImageFont

__all__ = ["Line", "with_legend", "write_on"]

_FONT = 13  # pixels on the screen
_SWATCH = 11  # pixels on the screen
_RULER = "#cc0066"


@dataclass(frozen=True, slots=True, kw_only=True)
class Line:
    """Marked places, mm as drawn, joined by a line where there are two, and words beside it."""

    places: tuple[tuple[float, ...], ...]
    text: str = ""
    colour: str = _RULER


@dataclass(frozen=True, slots=True)
class _Pen:
    """What everything is written with, on a picture of `scale` pixels to a point."""

    draw: ImageDraw.ImageDraw
    font: ImageFont.FreeTypeFont | ImageFont.ImageFont
    ink: str
    paper: str
    scale: float

    def text(self, at: tuple[float, float], words: str, anchor: str) -> None:
        """Words that can be read over anything."""
        self.draw.text(
            at,
            words,
            fill=self.ink,
            font=self.font,
            anchor=anchor,
            stroke_width=max(1, round(self.scale)),
            stroke_fill=self.paper,
        )

    def line(self, points: tuple[float, ...], width: float, colour: Any = None) -> None:
        self.draw.line(points, fill=colour or self.ink, width=max(1, round(width * self.scale)))


def write_on(
    image: Image.Image,
    axes: NDArray[np.float64],
    focus: NDArray[np.float64],
    half: float,
    notes: list[str],
    lines: Sequence[Line],
    *,
    dark: bool = False,
    scale: float = 1.0,
) -> None:
    """Draw all of it.

    Parameters
    ----------
    image : Image
    axes : ndarray, shape (3, 3)
        Right, up and towards the viewer, as rows.
    focus : ndarray, shape (3,)
        What lies in the middle of the picture, mm.
    half : float
        Half the height of the picture, mm.
    notes : list of str
        From the top left, each begins a line.
    lines : list of Line
    dark : bool
        Whether the background is.
    scale : float
        Pixels of the picture to one on the screen.
    """
    font = ImageFont.load_default(_FONT * scale)
    ink, paper = ("white", "#1c1c1c") if dark else ("black", "white")
    pen = _Pen(ImageDraw.Draw(image), font, ink, paper, scale)
    _axes(pen, axes, image.height)
    _bar(pen, image.size, half)
    top = 5 * scale
    for note in notes:
        for words in _wrapped(pen, note, image.width - 16 * scale):
            pen.text((8 * scale, top), words, "la")
            top += 1.25 * _FONT * scale
    for line in lines:
        _line(pen, line, axes, focus, image.height / (2.0 * half), image.size)


def _wrapped(pen: _Pen, text: str, width: float) -> list[str]:
    lines: list[str] = []
    for word in text.split():
        if lines and pen.draw.textlength(f"{lines[-1]} {word}", font=pen.font) <= width:
            lines[-1] += f" {word}"
        else:
            lines.append(word)
    return lines


def _axes(pen: _Pen, axes: NDArray[np.float64], height: int) -> None:
    x0, y0 = 40 * pen.scale, height - 40 * pen.scale
    for a in range(3):
        dx, dy = 26 * pen.scale * axes[0, a], -26 * pen.scale * axes[1, a]
        pen.line((x0, y0, x0 + dx, y0 + dy), 1.5)
        pen.text((x0 + 1.4 * dx, y0 + 1.4 * dy), "xyz"[a], "mm")


def _bar(pen: _Pen, size: tuple[int, int], half: float) -> None:
    width, height = size
    span = 0.2 * width * 2.0 * half / height
    power = 10.0 ** math.floor(math.log10(span))
    bar = power * max(s for s in (1, 2, 5) if s * power <= span)
    right = width - 14 * pen.scale
    left = right - bar * height / (2.0 * half)
    y = height - 14 * pen.scale
    pen.line((left, y, right, y), 2)
    pen.text((0.5 * (left + right), y - 4 * pen.scale), f"{bar:g} mm", "mb")


def _line(
    pen: _Pen,
    line: Line,
    axes: NDArray[np.float64],
    focus: NDArray[np.float64],
    pixels: float,
    size: tuple[int, int],
) -> None:
    """Marked places, over whatever lies before them; `pixels` of the picture are 1 mm."""
    flat = (np.array(line.places) - focus) @ axes[:2].T
    points = [(0.5 * size[0] + pixels * u, 0.5 * size[1] - pixels * v) for u, v in flat]
    if len(points) > 1:
        pen.line((*points[0], *points[1]), 2, line.colour)
    r = 4 * pen.scale
    for x, y in points:
        width = max(1, round(1.5 * pen.scale))
        pen.draw.ellipse((x - r, y - r, x + r, y + r), outline=line.colour, width=width)
        pen.draw.ellipse((x - 1, y - 1, x + 1, y + 1), fill=line.colour)
    if line.text:
        x, y = np.mean(points, axis=0)
        pen.text((float(x), float(y) - 6 * pen.scale), line.text, "mb")


def with_legend(
    image: Image.Image, legend: Mapping[str, Any], *, dark: bool = False, scale: float = 1.0
) -> Image.Image:
    """The picture over a strip that says what its colours mean.

    Parameters
    ----------
    image : Image
    legend : mapping
        ``ramp`` with colours, low and high, or ``items`` with colour and text each.
    dark : bool
    scale : float
        Pixels of the picture to one on the screen.
    """
    font = ImageFont.load_default(_FONT * scale)
    ink, paper = ("white", "#1c1c1c") if dark else ("black", "white")
    line, gap = round(1.7 * _FONT * scale), round(8 * scale)
    pieces = list(_pieces(legend))
    measure = ImageDraw.Draw(image)
    places, x, row = [], gap, 0
    for colours, text in pieces:
        wide = round(len(colours) * _SWATCH * scale) + round(measure.textlength(text, font=font))
        if x > gap and x + wide > image.width:
            x, row = gap, row + 1
        places.append((x, row))
        x += wide + 2 * gap
    high = image.height + line * (row + 1) if pieces else image.height
    out = Image.new("RGB", (image.width, high), paper)
    out.paste(image)
    draw = ImageDraw.Draw(out)
    for (colours, text), (x, row) in zip(pieces, places, strict=True):
        y = image.height + row * line + line // 2
        wide = round(_SWATCH * scale)
        for n, colour in enumerate(colours):
            box = (x + n * wide, y - wide // 2, x + (n + 1) * wide - 1, y + wide // 2)
            draw.rectangle(box, fill=colour)
        draw.text((x + len(colours) * wide + gap // 2, y), text, fill=ink, font=font, anchor="lm")
    return out


def _pieces(legend: Mapping[str, Any]) -> Iterator[tuple[list[str], str]]:
    """Colours in a row, and the words after them."""
    ramp = legend.get("ramp")
    if ramp:
        yield [], str(ramp["low"])
        yield list(ramp["colours"]), str(ramp["high"])
    for item in legend.get("items", ()):
        blank = item["colour"] == "transparent"
        yield ([] if blank else [item["colour"]]), str(item["text"])

"""What is written onto a picture in space: axes, a bar for the scale, notes, a measured line."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from PIL import Image, ImageDraw, ImageFont

__all__ = ["Line", "write_on"]

_FONT = 19  # pixels at the size of a frame, which a narrow column shows at two thirds
_RULER = (204, 0, 102)


@dataclass(frozen=True, slots=True, kw_only=True)
class Line:
    """Marked places, mm as drawn, joined by a line where there are two, and words beside it."""

    places: tuple[tuple[float, ...], ...]
    text: str = ""


def write_on(
    image: Image.Image,
    axes: NDArray[np.float64],
    focus: NDArray[np.float64],
    half: float,
    notes: list[str],
    ruler: Line | None,
    *,
    dark: bool = False,
    scale: int = 1,
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
        One line each, from the top left.
    ruler : Line or None
    dark : bool
        Whether the background is.
    scale : int
        Pixels of the picture to one of a frame.
    """
    draw = ImageDraw.Draw(image)
    font = ImageFont.load_default(_FONT * scale)
    ink = "white" if dark else "black"
    _axes(draw, axes, image.height, font, ink, scale)
    _bar(draw, image.size, half, font, ink, scale)
    top = 8 * scale
    for note in notes:
        for text in _wrapped(draw, note, font, image.width - 24 * scale):
            _text(draw, (12 * scale, top), text, font, ink, dark, "la")
            top += round(1.2 * _FONT) * scale
    if ruler is not None:
        pixels = image.height / (2.0 * half)
        _ruler(draw, ruler, axes, focus, pixels, image.size, font, dark, scale)


def _text(
    draw: ImageDraw.ImageDraw,
    at: tuple[float, float],
    text: str,
    font: ImageFont.FreeTypeFont | ImageFont.ImageFont,
    ink: str,
    dark: bool,
    anchor: str,
) -> None:
    """Words that can be read over anything."""
    paper = "black" if dark else "white"
    draw.text(at, text, fill=ink, font=font, anchor=anchor, stroke_width=2, stroke_fill=paper)


def _wrapped(
    draw: ImageDraw.ImageDraw,
    text: str,
    font: ImageFont.FreeTypeFont | ImageFont.ImageFont,
    width: float,
) -> list[str]:
    lines: list[str] = []
    for word in text.split():
        if lines and draw.textlength(f"{lines[-1]} {word}", font=font) <= width:
            lines[-1] += f" {word}"
        else:
            lines.append(word)
    return lines


def _axes(
    draw: ImageDraw.ImageDraw,
    axes: NDArray[np.float64],
    height: int,
    font: ImageFont.FreeTypeFont | ImageFont.ImageFont,
    ink: str,
    scale: int,
) -> None:
    x0, y0 = 52 * scale, height - 52 * scale
    for a in range(3):
        dx, dy = 34 * scale * axes[0, a], -34 * scale * axes[1, a]
        draw.line((x0, y0, x0 + dx, y0 + dy), fill=ink, width=2 * scale)
        draw.text((x0 + 1.4 * dx, y0 + 1.4 * dy), "xyz"[a], fill=ink, font=font, anchor="mm")


def _bar(
    draw: ImageDraw.ImageDraw,
    size: tuple[int, int],
    half: float,
    font: ImageFont.FreeTypeFont | ImageFont.ImageFont,
    ink: str,
    scale: int,
) -> None:
    width, height = size
    span = 0.2 * width * 2.0 * half / height
    power = 10.0 ** math.floor(math.log10(span))
    bar = power * max(s for s in (1, 2, 5) if s * power <= span)
    right = width - 20 * scale
    left = right - bar * height / (2.0 * half)
    y = height - 22 * scale
    draw.line((left, y, right, y), fill=ink, width=3 * scale)
    at = (0.5 * (left + right), y - 6 * scale)
    draw.text(at, f"{bar:g} mm", fill=ink, font=font, anchor="mb")


def _ruler(
    draw: ImageDraw.ImageDraw,
    ruler: Line,
    axes: NDArray[np.float64],
    focus: NDArray[np.float64],
    pixels: float,
    size: tuple[int, int],
    font: ImageFont.FreeTypeFont | ImageFont.ImageFont,
    dark: bool,
    scale: int,
) -> None:
    flat = (np.array(ruler.places) - focus) @ axes[:2].T
    points = [(0.5 * size[0] + pixels * u, 0.5 * size[1] - pixels * v) for u, v in flat]
    if len(points) > 1:
        draw.line([*points[0], *points[1]], fill=_RULER, width=3 * scale)
    r = 5 * scale
    for x, y in points:
        draw.ellipse((x - r, y - r, x + r, y + r), outline=_RULER, width=2 * scale)
        draw.ellipse((x - 1, y - 1, x + 1, y + 1), fill=_RULER)
    if ruler.text and len(points) > 1:
        (x0, y0), (x1, y1) = points[:2]
        middle = (0.5 * (x0 + x1), 0.5 * (y0 + y1) - 8 * scale)
        _text(draw, middle, ruler.text, font, "white" if dark else "black", dark, "mb")

"""A design as it forms: a moving picture of the iterates, GIF or WebP."""

from __future__ import annotations

import io
from collections.abc import Sequence
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from PIL import Image, ImageDraw

from voxelmat.errors import InputError
from voxelmat.io.atomic import write_bytes
from voxelmat.model.part import Part
from voxelmat.monitor import SILENT, Monitor
from voxelmat.topopt.iterate import Iterate
from voxelmat.units import quantity
from voxelmat.workflow.colours import palette_rgb

__all__ = ["FORMATS", "Frames", "check_animation", "write_animation"]

#: Endings of files, and what they are called.
FORMATS = {".gif": "GIF", ".webp": "WEBP"}

_WIDE = 480  # pixels, about
_MOST = 120  # pictures; of a longer run every second one, every fourth one ...
_MS = 120  # a picture
_LAST_MS = 1500


def check_animation(path: Path) -> Path:
    """The path, once it is sure that such a file can be made."""
    if path.suffix.lower() not in FORMATS:
        raise InputError(
            f"A moving picture ends in {' or '.join(FORMATS)}; got '{path.name}'.", key="animate"
        )
    return path


class Frames:
    """Collects iterates as `voxelmat.topopt.optimise.optimise` hands them on.

    Never more than a fixed number: then every second one is dropped, and from there on only
    every second, fourth, ... one is taken.
    """

    def __init__(self) -> None:
        self.iterates: list[Iterate] = []
        self._every = 1

    def __call__(self, iterate: Iterate) -> None:
        """Take one."""
        if (iterate.record.iteration - 1) % self._every == 0:
            self.iterates.append(iterate)
        if len(self.iterates) > _MOST:
            self.iterates = self.iterates[::2]
            self._every *= 2


def write_animation(
    iterates: Sequence[Iterate],
    path: Path,
    *,
    unit: str = "",
    final: Part | None = None,
    monitor: Monitor = SILENT,
) -> Path:
    """Write how a design formed: the two middle cuts of every iterate.

    Parameters
    ----------
    iterates : sequence of Iterate
    path : Path
        Ends in ``.gif`` or ``.webp``; written whole or not at all.
    unit : str
        Of the objective.
    final : Part, optional
        Shown last, as the optimiser finished it.
    monitor : Monitor

    Raises
    ------
    InputError
        Another ending, or nothing to show.
    """
    check_animation(path)
    if not iterates:
        raise InputError("There is no iterate to show; the run did nothing.", key="animate")
    pictures = []
    for n, iterate in enumerate(iterates):
        monitor.report("drawing iterates", done=n, total=len(iterates))
        r = iterate.record
        words = f"iteration {r.iteration}   objective {quantity(r.objective, unit)}"
        pictures.append(_picture(iterate.part(), f"{words}   grey {r.grey:.2f}"))
    if final is not None:
        pictures.append(_picture(final, f"as made, after {iterates[-1].record.iteration}"))
    monitor.report("drawing iterates", done=len(iterates), total=len(iterates))
    pictures = _one_size(pictures)
    held = io.BytesIO()
    pictures[0].save(
        held,
        format=FORMATS[path.suffix.lower()],
        save_all=True,
        append_images=pictures[1:],
        duration=[_MS] * (len(pictures) - 1) + [_LAST_MS],
        loop=0,
    )
    write_bytes(path, held.getvalue())
    return path


def _cuts(part: Part) -> NDArray[np.uint8]:
    """The two cuts with the largest areas through the middle, side by side, row 0 on top."""
    n = part.grid.shape
    axes = sorted(range(3), key=lambda a: n[a])[:2]
    colour = palette_rgb(part).astype(np.float64) / 255.0
    cuts = []
    for axis in axes:
        labels = np.take(part.labels, n[axis] // 2, axis=axis).T[::-1]
        fill = np.take(part.fill, n[axis] // 2, axis=axis).T[::-1, :, None]
        cuts.append(1.0 - fill * (1.0 - colour[labels]))
    rows = max(c.shape[0] for c in cuts)
    high = [np.pad(c, ((rows - c.shape[0], 0), (1, 1), (0, 0)), constant_values=0.93) for c in cuts]
    return np.asarray(np.rint(255.0 * np.concatenate(high, axis=1)), dtype=np.uint8)


def _picture(part: Part, words: str) -> Image.Image:
    cut = _cuts(part)
    zoom = max(_WIDE // cut.shape[1], 1)
    drawn = Image.fromarray(cut).resize(
        (zoom * cut.shape[1], zoom * cut.shape[0]), Image.Resampling.NEAREST
    )
    wide = max(drawn.width, 360)
    page = Image.new("RGB", (wide, drawn.height + 22), "white")
    page.paste(drawn, ((wide - drawn.width) // 2, 22))
    ImageDraw.Draw(page).text((6, 5), words, fill="black")
    return page


def _one_size(pictures: list[Image.Image]) -> list[Image.Image]:
    """All as wide and as high as the largest, on white."""
    size = (max(p.width for p in pictures), max(p.height for p in pictures))
    found = []
    for picture in pictures:
        page = Image.new("RGB", size, "white")
        page.paste(picture, (0, 0))
        found.append(page)
    return found

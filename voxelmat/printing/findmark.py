"""Marks looked for in a written stack, so that a mirrored, turned or moved tray is caught."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from itertools import product

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.finding import Finding
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.marks import Mark
from voxelmat.printing.raster import Raster
from voxelmat.printing.readback import Stack

__all__ = [
    "FOUND_FROM",
    "MARK_CODES",
    "SYMMETRIES",
    "Symmetry",
    "find_marks",
    "mark_findings",
    "marks_of",
]

#: Codes of the findings on marks.
MARK_CODES = ("mark record", "mark not found", "tray mirrored", "tray moved", "tray turned")

#: A mark is found where (share of stroke cells that are right) + (share of the others that are
#: right) - 1 is at least this; a place with nothing to do with the mark scores about 0.
FOUND_FROM = 0.8
_SHIFTS = range(-6, 7)  # half cells by which a mark is looked for beside its place

Pixels = tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.int64]]


@dataclass(frozen=True, slots=True)
class Symmetry:
    """One way in which images can lie wrongly: swapped, run backwards, piled from the top."""

    swapped: bool
    rows: bool
    columns: bool
    layers: bool = False

    @property
    def mirrored(self) -> bool:
        """True where parts come out as their mirror images."""
        return (self.swapped + self.rows + self.columns + self.layers) % 2 == 1

    def __str__(self) -> str:
        said = [
            text
            for on, text in (
                (self.swapped, "rows and columns are swapped"),
                (self.rows, "rows run backwards"),
                (self.columns, "columns run backwards"),
                (self.layers, "layers run downwards"),
            )
            if on
        ]
        return " and ".join(said) or "as they should be"


#: The eight symmetries of a rectangle's images, the right one first.
SYMMETRIES = tuple(Symmetry(*flags) for flags in product((False, True), repeat=3))


def marks_of(stack: Stack) -> tuple[Mark, ...]:
    """The marks that a stack's manifest lists.

    Raises
    ------
    InputError
        If a record is not that of a mark.
    """
    listed = stack.manifest.get("notes", {}).get("marks", [])
    if not isinstance(listed, list):
        raise InputError("The manifest's notes.marks is not a list.", key="notes.marks")
    return tuple(Mark.from_dict(entry) for entry in listed)


def _pixels(raster: Raster, points: NDArray[np.float64]) -> Pixels:
    """Layer, row and column of points on the tray; they may lie outside the images."""
    pitch = [float(p) for p in raster.pitch]
    sites = np.floor(points / pitch).astype(np.int64) - np.array(raster.offset)
    found = []
    for axis, sign in raster.image_axes:
        at = sites[:, axis]
        found.append(at if sign > 0 else raster.shape[axis] - 1 - at)
    return (found[0], found[1], found[2])


class _Reader:
    """Where a stack lays a resin of the parts, at single pixels."""

    def __init__(self, stack: Stack) -> None:
        self._stack = stack
        self._model = [n for n, c in enumerate(stack.channels) if c.role == "model"]
        self._layers: dict[int, NDArray[np.uint8]] = {}

    def forget(self) -> None:
        """Let go of the layers read so far."""
        self._layers.clear()

    def at(self, pixels: Pixels) -> NDArray[np.bool_]:
        """True where a resin is laid; False outside the images."""
        layers, rows, columns = self._stack.raster.image_shape
        k, r, c = pixels
        inside = (k >= 0) & (k < layers) & (r >= 0) & (r < rows) & (c >= 0) & (c < columns)
        solid = np.zeros(len(k), dtype=np.bool_)
        for layer in np.unique(k[inside]):
            bits = self._layer(int(layer))
            here = inside & (k == layer)
            solid[here] = bits[r[here], c[here] >> 3] >> (7 - (c[here] & 7)) & 1
        return solid

    def _layer(self, layer: int) -> NDArray[np.uint8]:
        if layer not in self._layers:
            bits = self._stack.bits(layer)[self._model]
            self._layers[layer] = np.asarray(np.bitwise_or.reduce(bits, axis=0), dtype=np.uint8)
        return self._layers[layer]


def _score(solid: NDArray[np.bool_], wanted: NDArray[np.bool_]) -> float:
    return float(solid[wanted].mean() + (~solid[~wanted]).mean() - 1)


def _turned(pixels: Pixels, way: Symmetry, shape: tuple[int, int, int]) -> Pixels:
    """Where pixels went if images were written in the wrong way."""
    layers, rows, columns = shape
    k, r, c = pixels
    if way.swapped:
        r, c = c, r
    return (
        layers - 1 - k if way.layers else k,
        rows - 1 - r if way.rows else r,
        columns - 1 - c if way.columns else c,
    )


def find_marks(
    stack: Stack, *, monitor: Monitor = SILENT
) -> Iterator[tuple[Mark, float, str, Symmetry | None]]:
    """Look for every mark of a stack.

    Yields
    ------
    mark : Mark
    score : float
        See `FOUND_FROM`; of the way in which it was found, or of its own place if it was not.
    how : str
        Empty where it stands as it should; else in words how it was found, or "not found".
    way : Symmetry or None
        How the images lie, if it was found.

    Raises
    ------
    FileFormatError
        If an image is missing or damaged.
    """
    reader = _Reader(stack)
    marks = marks_of(stack)
    for done, mark in enumerate(marks):
        points, wanted = mark.samples()
        pixels = _pixels(stack.raster, points)
        own = _score(reader.at(pixels), wanted)
        if own >= FOUND_FROM:
            yield mark, own, "", SYMMETRIES[0]
        else:
            yield _elsewhere(reader, stack, mark, own)
        reader.forget()
        monitor.report("looking for marks", done=done + 1, total=len(marks))


def _elsewhere(
    reader: _Reader, stack: Stack, mark: Mark, own: float
) -> tuple[Mark, float, str, Symmetry | None]:
    """A mark that is not where it should be: in wrong images, or moved."""
    points, wanted = mark.samples()
    pixels = _pixels(stack.raster, points)
    best: tuple[float, str, Symmetry] = (-1.0, "", SYMMETRIES[0])
    for way in (*SYMMETRIES, *(replace(s, layers=True) for s in SYMMETRIES)):
        score = _score(reader.at(_turned(pixels, way, stack.raster.image_shape)), wanted)
        if score > best[0]:
            best = (score, str(way), way)
    if best[0] < FOUND_FROM:
        for i, j in product(_SHIFTS, _SHIFTS):
            step = np.array([i * _cell(mark, 0), j * _cell(mark, 1), 0.0]) / 2
            score = _score(reader.at(_pixels(stack.raster, points + step)), wanted)
            if score > best[0]:
                words_of = f"moved by about {step[0]:.2g} mm along x and {step[1]:.2g} mm along y"
                best = (score, words_of, SYMMETRIES[0])
    if best[0] >= FOUND_FROM:
        return mark, best[0], best[1], best[2]
    return mark, own, "not found", None


def _cell(mark: Mark, axis: int) -> float:
    """Size of a cell along a tray axis; of its other side where the text does not run along it."""
    right, up = np.abs(mark.right_mm), np.abs(mark.up_mm)
    return float(max(right[axis], up[axis]) or min(right.max(), up.max()))


def _in_part(stack: Stack, mark: Mark) -> tuple[float, float, float] | None:
    """Where a mark should be, in the coordinates of the part that it tells."""
    for part in stack.parts:
        if part.name == mark.part:
            move = np.array(mark.origin_mm) - np.array(part.raster.translation)
            x, y, z = np.array(part.raster.rotation).T @ move
            return (float(x), float(y), float(z))
    return None


def mark_findings(stack: Stack, *, monitor: Monitor = SILENT) -> list[Finding]:
    """What is wrong with the marks of a stack; empty where all stand as they should.

    Raises
    ------
    FileFormatError
        If an image is missing or damaged.
    """
    try:
        looked = list(find_marks(stack, monitor=monitor))
    except InputError as error:
        return [
            Finding(
                severity="stop",
                code="mark record",
                message=f"The manifest's records of marks cannot be read: {error.message}",
                remedy="Write the stack again.",
            )
        ]
    found = []
    for mark, score, how, way in looked:
        if not how:
            continue
        where = f"The mark of '{mark.part}' ({' / '.join(mark.text)})"
        if way is None:
            code, message = "mark not found", f"{where} is not at its place nor near it."
        elif way.mirrored:
            code = "tray mirrored"
            message = f"{where} is found where {how}: parts would come out as mirror images."
        elif how.startswith("moved"):
            code, message = "tray moved", f"{where} is {how}."
        else:
            code, message = "tray turned", f"{where} is found where {how}."
        found.append(
            Finding(
                severity="stop",
                code=code,
                message=message,
                place_mm=_in_part(stack, mark),
                remedy="Write the stack again; do not turn or mirror images on the way.",
                value=score,
                limit=FOUND_FROM,
                part=mark.part,
            )
        )
    return found

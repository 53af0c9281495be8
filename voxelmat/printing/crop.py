"""A box of pixels cut out of a stack: where it lies, and the rasters that describe it."""

from __future__ import annotations

import dataclasses
import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.finding import Finding
from voxelmat.printing.raster import Raster
from voxelmat.printing.readback import Stack

__all__ = ["PROOF_HEIGHT", "PROOF_LIMIT", "Crop", "proof_crop"]

#: Height of a proof print, mm; sides of a crop round a finding, mm; longest printing time, s,
#: by the slowest figures of the profile, without warm-up and cool-down.
PROOF_HEIGHT = 3.0
_SIDE = 20.0
PROOF_LIMIT = 1800.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Crop:
    """Half-open ranges of layers, rows and columns of a stack's images.

    Attributes
    ----------
    layers, rows, columns : tuple of int
    why : str
        What was chosen and why, for people.
    time_s : float
        Printing time by the slowest figures of the profile, warm-up and cool-down left out.
    """

    layers: tuple[int, int]
    rows: tuple[int, int]
    columns: tuple[int, int]
    why: str
    time_s: float

    def cut(self, bits: NDArray[np.uint8]) -> NDArray[np.uint8]:
        """The box out of packed bits (channels, rows, stride); padding bits are 0."""
        first, last = self.columns
        piece = bits[:, self.rows[0] : self.rows[1], first // 8 : (last + 7) // 8]
        start = first % 8
        flat = np.unpackbits(piece, axis=2, count=start + last - first)
        return np.packbits(flat[..., start:], axis=2)

    def window(self, raster: Raster) -> Raster:
        """The raster of the box, set down on the tray."""
        shape, offset = [0, 0, 0], [0, 0, 0]
        ranges = (self.layers, self.rows, self.columns)
        for (axis, sign), (first, last) in zip(raster.image_axes, ranges, strict=True):
            start = first if sign > 0 else raster.shape[axis] - last
            shape[axis], offset[axis] = last - first, raster.offset[axis] + start
        x, y, z = raster.translation
        lowered = z - offset[2] * float(raster.pitch[2])
        return dataclasses.replace(
            raster,
            shape=(shape[0], shape[1], shape[2]),
            offset=(offset[0], offset[1], 0),
            translation=(x, y, lowered),
        )

    def parts(self, stack: Stack) -> list[dict[str, Any]]:
        """The manifest's ``parts`` entries of what lies in the box."""
        found = []
        box = (self.layers, self.rows, self.columns)
        for part, entry in zip(stack.parts, stack.manifest["parts"], strict=True):
            own = [
                (max(a, s.start) - s.start, min(b, s.stop) - s.start)
                for (a, b), s in zip(box, (part.layers, part.rows, part.columns), strict=True)
            ]
            if all(a < b for a, b in own):
                inner = dataclasses.replace(self, layers=own[0], rows=own[1], columns=own[2])
                raster = inner.window(part.raster)
                found.append({**entry, "raster": raster.as_dict()})
        if not found:
            raise InputError("There is no part where the proof print should be cut.")
        return found


def _pixel(stack: Stack, finding: Finding) -> tuple[int, int, int]:
    """Layer, row and column of a finding's place, inside the images."""
    place = finding.place_mm
    if place is None:
        raise InputError(f"The finding '{finding.code}' has no place to cut a proof print round.")
    raster = stack.part(finding.part).raster if finding.part else stack.parts[0].raster
    turn = np.array(raster.rotation)
    tray = turn @ np.array(place) + np.array(raster.translation)
    window = stack.raster
    at = []
    for axis, sign in window.image_axes:
        site = math.floor(tray[axis] / float(window.pitch[axis])) - window.offset[axis]
        site = min(max(site, 0), window.shape[axis] - 1)
        at.append(site if sign > 0 else window.shape[axis] - 1 - site)
    return at[0], at[1], at[2]


def _round(middle: int, size: int, n: int) -> tuple[int, int]:
    """A range of at most `size` round `middle` inside ``0 .. n``."""
    size = max(1, min(size, n))
    first = min(max(middle - size // 2, 0), n - size)
    return first, first + size


def proof_crop(
    stack: Stack,
    finding: Finding | None = None,
    *,
    height_mm: float = PROOF_HEIGHT,
    side_mm: float = _SIDE,
    limit_s: float = PROOF_LIMIT,
) -> Crop:
    """Choose what a proof print shows.

    Round a finding a box of `side_mm` by `side_mm` by `height_mm`; without one the first
    `height_mm` of the whole window. Where that takes longer than `limit_s`, swaths are left out
    until it fits, and where one swath is too long, layers.

    Raises
    ------
    InputError
        If a size is not above 0, if the finding has no place, or if not one layer can be
        printed in the time.
    """
    if not (height_mm > 0 and side_mm > 0 and limit_s > 0):
        raise InputError(
            f"A proof print has sizes and a time above 0; got {height_mm} mm, {side_mm} mm and "
            f"{limit_s} s."
        )
    window = stack.raster
    shape = window.image_shape
    pitch = [float(window.pitch[axis]) for axis, _ in window.image_axes]
    layers = min(shape[0], max(1, math.floor(height_mm / pitch[0] + 1e-9)))
    if finding is None:
        first = stack.parts[0]
        middle = [(s.start + s.stop) // 2 for s in (first.rows, first.columns)]
        at = (0, middle[0], middle[1])
        sides = [shape[1], shape[2]]
        where = "from the tray upwards"
    else:
        at = _pixel(stack, finding)
        sides = [min(n, math.ceil(side_mm / p)) for n, p in zip(shape[1:], pitch[1:], strict=True)]
        where = f"round '{finding.code}' ({finding.severity})"
    y = 0 if window.image_axes[1][0] == 1 else 1  # which side of an image follows tray y
    process = stack.profile.process
    per_swath = process.passes_per_layer * process.swath_s[1]
    swath = process.swath_mm / pitch[1 + y]  # sites
    needed = math.ceil(sides[y] / swath - 1e-9)
    if process.layer_s[1] + per_swath > limit_s:
        raise InputError(
            f"One layer takes {process.layer_s[1] + per_swath:g} s on '{stack.profile.name}'; no "
            f"proof print is possible in {limit_s:g} s."
        )
    left_out = []
    room = limit_s / layers - process.layer_s[1]
    allowed = max(1, math.floor(room / per_swath)) if per_swath > 0 else needed
    if allowed < needed:
        sides[y] = math.floor(allowed * swath)
        left_out.append(f"{allowed} of {needed} swaths")
        needed = allowed
    most = math.floor(limit_s / (process.layer_s[1] + needed * per_swath)) if limit_s else layers
    if most < layers:
        left_out.append(f"{most} of {layers} layers")
        layers = most
    columns = _round(at[2], sides[1], shape[2])
    size = f"{layers} layers ({layers * pitch[0]:.3g} mm) {where}"
    cut = (
        f"; cut to {' and '.join(left_out)} to stay below {limit_s / 60:g} min" if left_out else ""
    )
    return Crop(
        layers=_round(at[0], layers, shape[0]),
        rows=_round(at[1], sides[0], shape[1]),
        columns=columns,
        why=size + cut,
        time_s=layers * (process.layer_s[1] + needed * per_swath),
    )

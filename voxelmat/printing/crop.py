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
from voxelmat.model.profile import PrintProfile
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
    tray = np.array(place)
    if finding.part or len(stack.parts) == 1:  # else the place is on the tray
        raster = stack.part(finding.part or 0).raster
        tray = np.array(raster.rotation) @ tray + np.array(raster.translation)
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


def _within(
    profile: PrintProfile, limit_s: float, layers: int, depth_mm: float
) -> tuple[int, float, float, str]:
    """Layers and depth along tray y that print in time: swaths go first, then layers.

    Returns
    -------
    layers : int
    depth_mm, time_s : float
    said : str
        What was left out; empty where nothing was.
    """
    process = profile.process
    swath_s, layer_s = process.passes_per_layer * process.swath_s[1], process.layer_s[1]
    if layer_s + swath_s > limit_s:
        raise InputError(
            f"One layer takes {layer_s + swath_s:g} s on '{profile.name}'; no proof print is "
            f"possible in {limit_s:g} s."
        )
    needed = math.ceil(depth_mm / process.swath_mm - 1e-9)
    left_out = []
    if layers * (layer_s + needed * swath_s) > limit_s:
        room = limit_s / layers - layer_s
        swaths = max(1, math.floor(room / swath_s)) if swath_s > 0 else needed
        if swaths < needed:
            depth_mm = swaths * process.swath_mm
            left_out.append(f"{swaths} of {needed} swaths")
            needed = swaths
        fitting = min(layers, math.floor(limit_s / (layer_s + needed * swath_s)))
        if fitting < layers:
            left_out.append(f"{fitting} of {layers} layers")
            layers = fitting
    said = f"; cut to {' and '.join(left_out)} to stay below {limit_s / 60:g} min"
    time_s = layers * (layer_s + needed * swath_s)
    return layers, depth_mm, time_s, said if left_out else ""


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
    depth = sides[y] * pitch[1 + y]
    layers, kept, time_s, said = _within(stack.profile, limit_s, layers, depth)
    if kept < depth:
        sides[y] = math.floor(kept / pitch[1 + y] + 1e-9)
    return Crop(
        layers=_round(at[0], layers, shape[0]),
        rows=_round(at[1], sides[0], shape[1]),
        columns=_round(at[2], sides[1], shape[2]),
        why=f"{layers} layers ({layers * pitch[0]:.3g} mm) {where}{said}",
        time_s=time_s,
    )

"""One part of a stack as it lies in the images, with the way from its millimetres to pixels."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.printing.raster import Raster
from voxelmat.printing.readback import Stack

__all__ = ["PartView", "part_view"]

Bools = NDArray[np.bool_]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PartView:
    """A part's own window of the images.

    Attributes
    ----------
    stack : Stack
    name : str
        Of the part; empty where the stack holds one.
    raster : Raster
        The part's own window and transform.
    first : tuple of int
        Layer, row and column of the window's first pixel in the images of the stack.
    """

    stack: Stack
    name: str
    raster: Raster
    first: tuple[int, int, int]

    @property
    def shape(self) -> tuple[int, int, int]:
        """Layers, rows and columns of the window."""
        return self.raster.image_shape

    @property
    def step(self) -> NDArray[np.float64]:
        """Part millimetres a layer, a row and a column: the columns of a 3 x 3 matrix."""
        origin = np.array(self.raster.pixel_to_part(0, 0, 0))
        ends = ((1, 0, 0), (0, 1, 0), (0, 0, 1))
        return np.stack([np.array(self.raster.pixel_to_part(*e)) - origin for e in ends], axis=1)

    @property
    def pitch(self) -> NDArray[np.float64]:
        """Distance between sites along the part's x, y, z, mm."""
        return np.asarray(np.abs(self.step).sum(axis=1))

    def to_part(self, pixels: NDArray[np.float64]) -> NDArray[np.float64]:
        """Part coordinates of pixels (layer, row, column; whole numbers are centres), (n, 3)."""
        return np.asarray(pixels @ self.step.T + np.array(self.raster.pixel_to_part(0, 0, 0)))

    def to_pixels(self, points: NDArray[np.float64]) -> NDArray[np.float64]:
        """The inverse of `to_part`."""
        origin = np.array(self.raster.pixel_to_part(0, 0, 0))
        return np.asarray((points - origin) @ np.linalg.inv(self.step).T)

    def channels(self, layer: int) -> Bools:
        """Which channel claims which site of one layer, ``[channel, row, column]``.

        Raises
        ------
        FileFormatError
            If a file is missing or not the one that was written.
        """
        _, rows, columns = self.shape
        width = self.stack.raster.image_shape[2]
        bits = self.stack.bits(layer + self.first[0])[:, self.first[1] : self.first[1] + rows]
        first = self.first[2]
        plane = np.unpackbits(bits, axis=2, count=width)[:, :, first : first + columns]
        return plane.astype(np.bool_)

    def solid(self, layer: int) -> Bools:
        """Sites that any model channel claims, ``[row, column]``; support counts as empty."""
        if not 0 <= layer < self.shape[0]:
            return np.zeros(self.shape[1:], dtype=np.bool_)
        planes = self.channels(layer)
        model = [m for m, c in enumerate(self.stack.channels) if c.role != "support"]
        return np.asarray(planes[model].any(axis=0))

    def block(self, low: tuple[int, int, int], high: tuple[int, int, int]) -> Bools:
        """Solid of pixels `low` up to, without, `high`; outside the window is empty."""
        out = np.zeros([max(0, b - a) for a, b in zip(low, high, strict=True)], dtype=np.bool_)
        inner = [(max(a, 0), min(b, n)) for a, b, n in zip(low, high, self.shape, strict=True)]
        if any(a >= b for a, b in inner):
            return out
        (_, _), (r0, r1), (c0, c1) = inner
        rows, columns = slice(r0 - low[1], r1 - low[1]), slice(c0 - low[2], c1 - low[2])
        for layer in range(*inner[0]):
            out[layer - low[0], rows, columns] = self.solid(layer)[r0:r1, c0:c1]
        return out


def part_view(stack: Stack, part: str | None = None) -> PartView:
    """The window of one part.

    Parameters
    ----------
    stack : Stack
    part : str, optional
        Its name on the tray; may be left out where the stack holds one.

    Raises
    ------
    InputError
        If the stack holds no part of that name, or several and none is named.
    """
    if part is None and len(stack.parts) != 1:
        names = ", ".join(p.name for p in stack.parts)
        raise InputError(
            f"The stack holds {len(stack.parts)} parts: {names}. Name one.", key="part"
        )
    found = stack.part(0 if part is None else part)
    return PartView(
        stack=stack,
        name=found.name if len(stack.parts) > 1 else "",
        raster=found.raster,
        first=found.start,
    )

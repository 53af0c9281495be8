"""Support by policy: a grid under overhangs, a thin skin, or columns, each filled from the top.

Every policy gives one field for part and support together, the least of the part's own and of
the support's, so the two meet without a gap; where both claim a site the part wins.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Callable, Iterable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from voxelmat.errors import InputError
from voxelmat.io.bigpart import AnyPart
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import DISTANCE_STEPS
from voxelmat.model.support_figures import DRAWN_SUPPORT, SupportFigures
from voxelmat.printing.raster import Raster
from voxelmat.printing.support import CLEARANCE, PlaneRow, SupportFill, fill_columns

__all__ = ["GridSupport", "SkinSupport", "support_fill"]

Outline = Callable[[int], NDArray[np.int8]]
_Near = tuple[NDArray[np.float32], NDArray[np.float32]]
_FAR = 127
#: Depths of the voxels that a skin is measured from, in the steps of an outline: the nearest voxel
#: inside is not always the one that shows the shortest way to the outline.
_CORES = (0, 8, 16)


def support_fill(
    policy: str, sizes: SupportFigures, part: AnyPart, raster: Raster
) -> SupportFill | None:
    """What fills the support field of one part on its raster.

    Parameters
    ----------
    policy : str
        One of `voxelmat.model.support_figures.SUPPORT_POLICIES`.
    sizes : SupportFigures
    part : Part or StoredPart
    raster : Raster

    Returns
    -------
    SupportFill or None
        None where the policy draws nothing: "machine" and "none".
    """
    if policy not in DRAWN_SUPPORT:
        return None
    if policy == "columns":
        return fill_columns
    spacing = _image_spacing(part.grid, raster)
    if policy == "grid":
        return GridSupport(sizes, spacing)
    return SkinSupport(sizes.skin, spacing, _steps(part))


def _image_spacing(grid: VoxelGrid, raster: Raster) -> tuple[float, float, float]:
    """Voxel edges along layers, rows and columns, mm."""
    layer, row, column = (grid.spacing[a] for a, _ in raster.part_axes())
    return (layer, row, column)


def _steps(part: AnyPart) -> int:
    """By how much an outline field exceeds a distance in 1/16 of the smallest voxel edge."""
    return DISTANCE_STEPS if part.distance is None and part.occupancy is not None else 1


@dataclass(frozen=True, slots=True)
class GridSupport:
    """Walls in both directions below every overhang, under a solid interface layer.

    The middles of the walls lie on voxel centres, where a wall of any thickness is drawn true;
    the pitch is rounded to whole voxels for that, at least two, and the thickness to 1/8 of the
    smallest voxel edge; under a part without a distance or an occupancy walls take whole voxels, an
    odd number. The grid is that of the design, so the bits are the same for any split.

    Attributes
    ----------
    sizes : SupportFigures
    spacing : tuple of float
        Voxel edges along layers, rows and columns, mm.
    """

    sizes: SupportFigures
    spacing: tuple[float, float, float]

    def __call__(self, outline: Outline, field: PlaneRow) -> None:
        """Fill the field plane by plane from the top."""
        layers, rows, columns = field.shape
        walls = np.minimum(
            self._walls(rows, self.spacing[1])[:, None], self._walls(columns, self.spacing[2])
        )
        window: deque[NDArray[np.int16]] = deque(maxlen=self.interface_planes + 1)
        above = np.full((rows, columns), _FAR, np.int16)
        for k in reversed(range(layers)):
            own = outline(k).astype(np.int16)
            window.append(own)
            np.minimum(above, own, out=above)
            near = np.minimum.reduce(list(window))
            support = np.minimum(near, np.maximum(above, walls)) + CLEARANCE
            field[k] = np.minimum(own, np.minimum(support, _FAR)).astype(np.int8)

    @property
    def interface_planes(self) -> int:
        """Voxel planes of the interface layer, at least one."""
        return max(1, math.ceil(self.sizes.interface / self.spacing[0] - 1e-9))

    def _walls(self, n: int, edge: float) -> NDArray[np.int16]:
        """Signed distance to the nearest wall across one axis, in the steps of an outline."""
        pitch = max(2, round(self.sizes.grid_pitch / edge))
        at = np.arange(n)
        off = np.abs(at % pitch)
        off = np.minimum(off, pitch - off) * edge - self.sizes.grid_wall / 2
        steps = np.rint(off * DISTANCE_STEPS / min(self.spacing)) - CLEARANCE
        return np.asarray(np.clip(steps, -_FAR, _FAR - CLEARANCE), np.int16)


@dataclass(frozen=True, slots=True)
class SkinSupport:
    """A skin of even thickness beside and below the part; nothing on surfaces that look up.

    A site is support where some site of the part at its height or above lies within the
    thickness, and nearer than the part straight below it, so that slopes of more than 45 degrees
    carry a skin and flatter ones that look up do not. Distances are exact on flat faces along the
    axes; on oblique ones the skin is thin by up to a fifth of a voxel. It ends with
    the raster and the design grid; `voxelmat.printing.skin_room` makes room for it.

    Attributes
    ----------
    thickness : float
        mm.
    spacing : tuple of float
        Voxel edges along layers, rows and columns, mm.
    steps : int
        By how much the outline field exceeds 1/16 of the smallest voxel edge.
    """

    thickness: float
    spacing: tuple[float, float, float]
    steps: int

    def __post_init__(self) -> None:
        if self.thickness < max(self.spacing) / 8:
            raise InputError(
                f"A skin of {self.thickness:g} mm is too thin to draw on voxels of "
                f"{max(self.spacing):g} mm; take at least {max(self.spacing) / 8:g} mm.",
                key="support.skin_mm",
            )

    def __call__(self, outline: Outline, field: PlaneRow) -> None:
        """Fill the field plane by plane from the top; a window of planes is in memory."""
        reach = math.ceil(self.thickness / self.spacing[0]) + 1
        window: deque[list[_Near]] = deque(maxlen=reach + 1)
        below: deque[NDArray[np.int8]] = deque()
        scale = DISTANCE_STEPS / min(self.spacing)
        for k in reversed(range(field.shape[0])):
            own = outline(k)
            window.appendleft([n for d in _CORES if (n := self._sideways(own, d)) is not None])
            while len(below) < reach and k - len(below) > 0:
                below.append(outline(k - len(below) - 1))
            least = np.full(own.shape, _FAR / scale + self.thickness, np.float32)
            for up, plane in enumerate(window):
                rise = np.float32(up * self.spacing[0])
                for side, depth in plane:
                    np.minimum(least, np.sqrt(side**2 + rise**2) + depth, out=least)
            skin = least - np.minimum(self.thickness, self._drop(own, below))
            skin = np.rint(skin * scale)
            if below:
                below.popleft()
            field[k] = np.minimum(own, np.clip(skin, -_FAR, _FAR)).astype(np.int8)

    def _drop(
        self, own: NDArray[np.int8], below: Iterable[NDArray[np.int8]]
    ) -> NDArray[np.float32]:
        """Height above the part straight below; at least the thickness where there is none."""
        drop = np.full(own.shape, 2 * self.thickness + self.spacing[0], np.float32)
        unit = np.float32(min(self.spacing) / (DISTANCE_STEPS * self.steps))
        free = own >= 0
        for m, plane in enumerate(below, 1):
            hit = free & (plane < 0)
            drop[hit] = np.maximum(m * self.spacing[0] + plane[hit] * unit, 0)
            free &= ~hit
        return drop

    def _sideways(self, outline: NDArray[np.int8], deep: int) -> _Near | None:
        """Distance within a plane to the nearest voxel so deep, and the outline's value there."""
        inside = outline < -deep
        if not inside.any():
            return None
        distance, at = ndimage.distance_transform_edt(
            ~inside, sampling=self.spacing[1:], return_indices=True
        )
        unit = min(self.spacing) / (DISTANCE_STEPS * self.steps)
        depth = outline[tuple(at)].astype(np.float32) * np.float32(unit)
        return distance.astype(np.float32), depth

"""A design as the printer sees it: voxels in image order with the stiffness of their blends."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.part import Part
from voxelmat.printing.raster import Raster
from voxelmat.printing.support import SupportFill, outline_field

__all__ = ["MOST_VOXELS", "RIGID_MODULUS", "SOFT_MODULUS", "Zones"]

#: Young's modulus, MPa, up to which a blend counts as soft and from which as rigid. Ours.
SOFT_MODULUS = 5.0
RIGID_MODULUS = 100.0
#: Larger designs are not judged zone by zone.
MOST_VOXELS = 100_000_000

Bools = NDArray[np.bool_]


@dataclass(frozen=True, slots=True, eq=False)
class Zones:
    """Intended zones of a part on its raster; arrays are ``[layer, row, column]`` of voxels.

    Attributes
    ----------
    part : Part
    raster : Raster
    solid : ndarray of bool
        Voxels whose centre lies inside the printed outline.
    modulus : ndarray of float32
        Young's modulus of the blend, MPa; 0 where nothing is printed.
    fill : ndarray of float32
        Solid share of each voxel.
    spacing, pitch : tuple of float
        Voxel edges and droplet distances along layers, rows, columns, mm.
    """

    part: Part
    raster: Raster
    solid: Bools
    modulus: NDArray[np.float32]
    fill: NDArray[np.float32]
    spacing: tuple[float, float, float]
    pitch: tuple[float, float, float]

    @classmethod
    def of(cls, part: Part, raster: Raster) -> Zones:
        """From a part placed on a raster.

        Raises
        ------
        InputError
            If the part has more than `MOST_VOXELS` voxels.
        """
        if part.labels.size > MOST_VOXELS:
            raise InputError(
                f"A design of {part.labels.size} voxels is too large to judge zone by zone; at "
                f"most {MOST_VOXELS} are taken."
            )
        bulk, shear = part.palette_moduli()
        young = np.zeros(len(bulk), np.float32)
        some = part.printed_labels() & (shear > 0)
        young[some] = (9 * bulk[some] * shear[some]) / (3 * bulk[some] + shear[some])
        solid = raster.to_image(outline_field(part)) < 0
        labels = raster.to_image(part.labels)
        occupancy = part.occupancy
        share = np.ones(solid.shape) if occupancy is None else raster.to_image(occupancy) / 255
        fill: NDArray[np.float32] = share.astype(np.float32)
        layer, row, column = (part.grid.spacing[a] for a, _ in raster.part_axes())
        z, y, x = (float(raster.pitch[a]) for a, _ in raster.image_axes)
        modulus = np.where(solid, young[labels], np.float32(0))
        return cls(part, raster, solid, modulus, fill, (layer, row, column), (z, y, x))

    @property
    def soft(self) -> Bools:
        """Voxels of soft blends."""
        return self.solid & (self.modulus > 0) & (self.modulus <= SOFT_MODULUS)

    @property
    def rigid(self) -> Bools:
        """Voxels of rigid blends."""
        return self.solid & (self.modulus >= RIGID_MODULUS)

    def place(self, voxel: tuple[int, ...]) -> tuple[float, float, float]:
        """Centre of a voxel ``(layer, row, column)`` in part coordinates, mm."""
        at = [0.0, 0.0, 0.0]
        centres = self.part.grid.centres()
        for (axis, sign), index in zip(self.raster.part_axes(), voxel, strict=True):
            n = self.part.grid.shape[axis]
            at[axis] = float(centres[axis][index if sign > 0 else n - 1 - index])
        return (at[0], at[1], at[2])

    def support(self, fill: SupportFill | None) -> Bools:
        """Voxels that support takes."""
        if fill is None:
            return np.zeros_like(self.solid)
        outline = self.raster.to_image(outline_field(self.part))
        field = np.empty_like(outline)
        fill(outline.__getitem__, field)
        return (field < 0) & ~self.solid

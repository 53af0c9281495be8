"""A symmetry plane as a support: half of a part stands for the whole."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.loadcase import Support
from voxelmat.model.part import Part
from voxelmat.model.region import FaceRegion, parse_side

__all__ = ["SymmetryPlane", "symmetry_support"]

# How far, in voxels, the plane may lie from the part's outermost nodes.
_OFF = 1e-3


@dataclass(frozen=True, slots=True, kw_only=True)
class SymmetryPlane(FaceRegion):
    """The outermost nodes on one side, checked to lie in the plane each time they are asked for."""

    at: float | None = None

    def nodes(self, part: Part) -> NDArray[np.bool_]:
        """Nodes of the plane; `InputError` where the part ends before it or goes through it."""
        axis, side, limit = self._reach(part)
        h = part.grid.spacing[axis]
        edge = limit + side * 1e-6 * h
        if self.at is not None and abs(edge - self.at) > _OFF * h:
            short = (edge - self.at) * side < 0
            raise InputError(
                f"The symmetry plane {'xyz'[axis]} = {self.at:g} mm does not meet the part, whose "
                f"outermost nodes on side {self.side} lie at {edge:g} mm: "
                f"{'the part ends before it' if short else 'the part goes through it'}. Move the "
                f"plane, cut the part there, or shift the grid so that a layer of nodes lies in "
                f"the plane."
            )
        return FaceRegion.nodes(self, part)


def symmetry_support(side: str, at: float | None = None) -> Support:
    """Support of a part that is mirrored in the plane that ends it.

    Parameters
    ----------
    side : str
        On which side of the part the plane lies, ``"x-"`` to ``"z+"``.
    at : float, optional
        Where the plane lies, mm: refused unless the part ends exactly there. By default the
        plane goes through the part's outermost nodes on that side.

    Returns
    -------
    Support
        No displacement through the plane, free along it. Loads and stiffness are those of the
        half; loads on the plane itself count half.
    """
    axis, _ = parse_side(side, "symmetry")
    if at is not None and not math.isfinite(at):
        raise InputError(f"The place of a symmetry plane must be finite; got {at}.")
    x, y, z = (0.0 if a == axis else None for a in range(3))
    region = SymmetryPlane(name=f"symmetry plane {side}", side=side, at=at)
    return Support(region=region, displacement=(x, y, z))

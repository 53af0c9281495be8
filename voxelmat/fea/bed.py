"""Elastic foundations: springs that lean with the true normal of a surface."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.loads import corners_of_faces, shared
from voxelmat.fea.operator import Product
from voxelmat.model.loadcase import Foundation
from voxelmat.model.part import Part

__all__ = ["Bed", "Coupled", "bed_of"]

Double = NDArray[np.float64]

# A normal this close to an axis couples nothing: rounding of the normal, not a slope.
_STRAIGHT = 1e-9
_PAIRS = ((0, 1), (0, 2), (1, 2))


@dataclass(frozen=True, slots=True, kw_only=True)
class Bed:
    """Springs to ground as 3x3 blocks.

    Attributes
    ----------
    name : str
    node : ndarray of intp, shape (n,)
        Flat nodes, each once.
    block : ndarray of float64, shape (n, 3, 3)
        N/mm.
    """

    name: str
    node: NDArray[np.intp]
    block: Double

    @property
    def leans(self) -> bool:
        """Whether some block couples directions."""
        size = np.abs(self.block).max(initial=0.0)
        return any(bool(np.any(np.abs(self.block[:, a, b]) > _STRAIGHT * size)) for a, b in _PAIRS)

    def push(self, u: Double) -> Double:
        """Force of the bed on the nodes, (n, 3), N; u ``[3, nz+1, ny+1, nx+1]``."""
        return np.asarray(-np.einsum("nab,bn->na", self.block, u.reshape(3, -1)[:, self.node]))


def bed_of(part: Part, load: Foundation, name: str) -> Bed:
    """The springs of a foundation: true area times stiffness, shared by the corners of each face.

    Raises
    ------
    InputError
        Where the region holds no exposed surface.
    """
    faces = load.region.faces(part)
    if not len(faces):
        raise InputError(
            f"{name[0].upper()}{name[1:]}: region '{load.region.name}' holds no exposed surface of "
            f"the part to stand on. Move or enlarge the region."
        )
    area = load.stiffness * faces.true_area
    if load.acts == "all":
        block = area[:, None, None] * np.eye(3)
    else:
        block = area[:, None, None] * faces.normal[:, :, None] * faces.normal[:, None, :]
    node, block = shared(corners_of_faces(part, faces), block)
    return Bed(name=name, node=node, block=block)


class Coupled:
    """A stiffness, and the couplings between directions of the beds under it."""

    def __init__(self, inner: Product, beds: tuple[Bed, ...]) -> None:
        self._inner, self._beds = inner, beds

    def apply(self, u: Double, y: Double) -> None:
        """Write K u to y; the beds' diagonals are among the springs of the inner stiffness."""
        self._inner.apply(u, y)
        from_, to = u.reshape(3, -1), y.reshape(3, -1)
        for bed in self._beds:
            for a, b in _PAIRS:
                k = bed.block[:, a, b]
                to[a, bed.node] += k * from_[b, bed.node]
                to[b, bed.node] += k * from_[a, bed.node]

    @property
    def nbytes(self) -> int:
        """Memory held, bytes."""
        return self._inner.nbytes + sum(b.block.nbytes + b.node.nbytes for b in self._beds)

"""Regions that are a piece of the surface: their voxels are those behind it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.model.part import Part
from voxelmat.model.surface import Faces, exposed_faces

__all__ = ["SurfaceRegion", "nodes_of_faces", "voxels_of_faces"]

Bools = NDArray[np.bool_]


def voxels_of_faces(faces: Faces, part: Part) -> Bools:
    """The voxels behind faces, ``[i, j, k]``."""
    out = np.zeros(part.grid.shape, dtype=bool, order="F")
    out[tuple(faces.voxel.T)] = True
    return out


def nodes_of_faces(faces: Faces, part: Part) -> Bools:
    """The corners of faces, ``[i, j, k]`` on ``grid.node_shape``."""
    out = np.zeros(part.grid.node_shape, dtype=bool, order="F")
    across = np.array([[1, 2], [0, 2], [0, 1]])[faces.axis]
    rows = np.arange(len(faces))
    for a in (0, 1):
        for b in (0, 1):
            node = faces.voxel.copy()
            node[rows, faces.axis] += faces.side > 0
            node[rows, across[:, 0]] += a
            node[rows, across[:, 1]] += b
            out[tuple(node.T)] = True
    return out


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SurfaceRegion:
    """Exposed faces that a function picks: a face of a mesh that was clicked and grown.

    Attributes
    ----------
    name : str
    picks : callable
        ``picks(faces, spacing)`` gives one bool a face.
    """

    name: str
    picks: Callable[[Faces, tuple[float, float, float]], Bools]

    def faces(self, part: Part) -> Faces:
        """The faces that are picked."""
        every = exposed_faces(part)
        return every.select(self.picks(every, part.grid.spacing))

    def voxels(self, part: Part) -> Bools:
        """The voxels behind those faces."""
        return voxels_of_faces(self.faces(part), part)

    def nodes(self, part: Part) -> Bools:
        """The corners of those faces."""
        return nodes_of_faces(self.faces(part), part)

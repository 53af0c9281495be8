"""Exposed voxel faces of a part, with the true normal and the projected area of each.

Where voxels are partly filled, the surface is that of the voxels that are at least half full
(and of fuller ones than all their neighbours, so that a thin wall keeps one). A load then acts
on voxels that are about as stiff as the material; the thinner rest outside still adds its share.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.model.part import DISTANCE_STEPS, Part

__all__ = ["Faces", "carriers", "exposed_faces", "visible_from"]

#: Cosine between normal and line of sight below which a wall is not seen; ours.
_GRAZING = 0.1


@dataclass(frozen=True, slots=True, kw_only=True)
class Faces:
    """Faces between a solid voxel and empty space (or the edge of the grid).

    The vector areas ``side * area`` of a closed staircase surface sum like those of the true
    surface, so a pressure that acts as ``-p n A`` on them has the true resultant. The scalar
    area of a staircase is too large (1.5 times for a sphere); `true_area` corrects it.

    Attributes
    ----------
    voxel : ndarray of intp, shape (n, 3)
        The solid voxel of each face.
    axis : ndarray of int8, shape (n,)
        0, 1, 2: along which axis the face looks.
    side : ndarray of int8, shape (n,)
        +1 where it looks up the axis, -1 down.
    area : ndarray of float64, shape (n,)
        Area of the voxel face, mm^2.
    centre : ndarray of float64, shape (n, 3)
        mm.
    normal : ndarray of float64, shape (n, 3)
        Outward unit normal of the true surface, from the signed distance or the occupancy.
    """

    voxel: NDArray[np.intp]
    axis: NDArray[np.int8]
    side: NDArray[np.int8]
    area: NDArray[np.float64]
    centre: NDArray[np.float64]
    normal: NDArray[np.float64]

    def __len__(self) -> int:
        return len(self.axis)

    def select(self, keep: NDArray[np.bool_] | NDArray[np.intp]) -> Faces:
        """Some of the faces, by mask or index."""
        return Faces(
            voxel=self.voxel[keep],
            axis=self.axis[keep],
            side=self.side[keep],
            area=self.area[keep],
            centre=self.centre[keep],
            normal=self.normal[keep],
        )

    @property
    def vector_area(self) -> NDArray[np.float64]:
        """Outward area vector of each voxel face, mm^2, shape (n, 3)."""
        out = np.zeros((len(self), 3))
        out[np.arange(len(self)), self.axis] = self.side * self.area
        return out

    @property
    def true_area(self) -> NDArray[np.float64]:
        """Each face's share of the true surface, mm^2: its area projected on the true normal."""
        along = self.normal[np.arange(len(self)), self.axis] * self.side
        return self.area * np.clip(along, 0.0, 1.0)


def _slopes(part: Part) -> list[NDArray[np.float32]]:
    """Outward gradient along each axis: of the signed distance, or of minus the fill."""
    if part.distance is not None:
        scale = min(part.grid.spacing) / DISTANCE_STEPS
        level = part.distance.astype(np.float32) * np.float32(scale)
    else:
        level = -part.fill
    grads = []
    for axis, h in enumerate(part.grid.spacing):
        if level.shape[axis] > 1:
            # a layer of repeated values: the slope of a face at the grid's edge is then one-sided
            grads.append(np.gradient(level, h, axis=axis))
        else:
            grads.append(np.zeros_like(level))
    return grads


def carriers(part: Part) -> NDArray[np.bool_]:
    """Solid voxels that bound the surface: half full or more, or fuller than all around them."""
    solid = part.solid
    if part.occupancy is None:
        return solid
    fill = np.where(solid, part.occupancy, 0)
    padded = np.pad(fill, 1)
    most = np.zeros_like(fill)
    for axis in range(3):
        for start in (slice(0, -2), slice(2, None)):
            shift = [slice(1, -1)] * 3
            shift[axis] = start
            np.maximum(most, padded[tuple(shift)], out=most)
    return np.asarray(solid & ((fill >= 128) | (fill >= most)))


def exposed_faces(part: Part) -> Faces:
    """All faces of surface voxels that border thinner ones, empty space or the grid's edge."""
    solid = carriers(part)
    padded = np.pad(solid, 1)
    spacing = part.grid.spacing
    centres = part.grid.centres()
    found = []
    for axis in range(3):
        area = part.grid.voxel_volume / spacing[axis]
        for side in (-1, 1):
            shift = [slice(1, -1)] * 3
            shift[axis] = slice(2, None) if side > 0 else slice(0, -2)
            open_face = solid & ~padded[tuple(shift)]
            voxel = np.argwhere(open_face)
            middle = np.column_stack([centres[a][voxel[:, a]] for a in range(3)])
            middle[:, axis] += 0.5 * side * spacing[axis]
            found.append((voxel, axis, side, area, middle))
    voxel = np.concatenate([f[0] for f in found])
    axis_of = np.concatenate([np.full(len(f[0]), f[1], np.int8) for f in found])
    side_of = np.concatenate([np.full(len(f[0]), f[2], np.int8) for f in found])
    own = np.zeros((len(voxel), 3))
    own[np.arange(len(voxel)), axis_of] = side_of
    normal = own
    if part.distance is not None or part.occupancy is not None:
        # At the face, half-way to the next voxel: at the centre of its own one the normal leans
        # away from the face where the surface is curved, and true areas come out too small.
        beyond = voxel.copy()
        beyond[np.arange(len(voxel)), axis_of] += side_of
        beyond = np.clip(beyond, 0, np.array(part.grid.shape) - 1)
        ends = tuple(voxel.T), tuple(beyond.T)
        slope = np.column_stack([0.5 * (g[ends[0]] + g[ends[1]]) for g in _slopes(part)])
        slope = slope.astype(np.float64)
        length = np.linalg.norm(slope, axis=1)
        # Where the shape ends at the grid's edge, or deep in a flat field, the slope says nothing.
        usable = length > 0.05
        along = np.einsum("ij,ij->i", slope, own)
        usable &= along > -0.2 * length
        normal = np.where(usable[:, None], slope / np.where(usable, length, 1.0)[:, None], own)
    return Faces(
        voxel=voxel,
        axis=axis_of,
        side=side_of,
        area=np.concatenate([np.full(len(f[0]), f[3]) for f in found]),
        centre=np.concatenate([f[4] for f in found]),
        normal=normal,
    )


def visible_from(part: Part, faces: Faces, axis: int, side: int) -> NDArray[np.bool_]:
    """Which faces someone sees who looks along an axis at the part.

    Parameters
    ----------
    part : Part
    faces : Faces
    axis : int
        0, 1 or 2.
    side : int
        +1 when the viewer stands at the high end of the axis, -1 at the low end.

    Returns
    -------
    ndarray of bool, shape (n,)
        A face is seen where the empty voxel before it has nothing between it and the viewer.
        Where the part knows its true surface, walls along the line of sight are not seen: faces
        on other axes whose true normal is within 6 degrees of right angles to it.
    """
    solid = np.pad(carriers(part), 1)
    order = np.flip(solid, axis=axis) if side > 0 else solid
    hidden = np.logical_or.accumulate(order, axis=axis)
    if side > 0:
        hidden = np.flip(hidden, axis=axis)
    before = faces.voxel + 1
    before[np.arange(len(faces)), faces.axis] += faces.side
    clear = ~hidden[tuple(before.T)]
    across = faces.axis != axis
    away = ~across & (faces.side == -side)
    if part.distance is not None or part.occupancy is not None:
        away |= across & (side * faces.normal[:, axis] < _GRAZING)
    return np.asarray(clear & ~away)

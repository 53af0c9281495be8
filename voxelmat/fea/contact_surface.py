"""The surface that an indenter sees: its nodes, where they truly lie, and the area of each.

Seen along the push the part is a height field, one voxel face a column. The height of each face
comes from the signed distance (or the filled fraction) and not from the voxel's edge, so that the
stairs of the grid are no part of the gap; a node lies where the heights round it say.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.indenter import Indenter, across
from voxelmat.model.part import Part
from voxelmat.model.region import parse_side
from voxelmat.model.surface import Faces, exposed_faces, visible_from

__all__ = ["TouchSurface", "touch_surface"]

Double = NDArray[np.float64]
Ints = NDArray[np.intp]

# Columns whose heights differ by more voxels than this are two surfaces with a step between.
_STEP = 1.5
# Weights of four values in a row for the one in their middle, exact for a cubic.
_MIDDLE = np.array([-1.0, 9.0, 9.0, -1.0]) / 16.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TouchSurface:
    """What can be touched: m nodes and f faces.

    Attributes
    ----------
    axis, sign : int
        Of the push.
    node : ndarray of intp, shape (m, 3)
        i, j, k.
    flat : ndarray of intp, shape (m,)
        Position in the flat node array ``[k, j, i]``.
    area, true_area : ndarray of float64, shape (m,)
        Share of the surface, projected along the push and as it slopes, mm^2.
    gap : ndarray of float64, shape (m,)
        Travel of the indenter until it touches the true surface at the node, less `touch`, mm.
    lean : ndarray of float64, shape (m,)
        Cosine between the indenter's normal there and the push.
    touch : float
        Travel from the indenter's position to first touch, mm.
    corners : ndarray of intp, shape (f, 4)
        Numbers 0 to m - 1 of the nodes of each face.
    """

    axis: int
    sign: int
    node: Ints
    flat: Ints
    area: Double
    true_area: Double
    gap: Double
    lean: Double
    touch: float
    corners: Ints

    def round_about(self, value: Double) -> Double:
        """Sum of a nodal value over the nodes of the faces round each node, shape (m,)."""
        near = np.concatenate([self.corners[:, [a, b]] for a in range(4) for b in range(4)])
        near = np.unique(near, axis=0)
        return np.bincount(near[:, 0], weights=value[near[:, 1]], minlength=len(value))


def _face_heights(part: Part, faces: Faces, axis: int, outward: int) -> Double:
    """Coordinate along the axis where the true surface crosses the column of each face, mm."""
    h = part.grid.spacing[axis]
    base = faces.centre[:, axis]
    inner = tuple(faces.voxel.T)
    beyond = faces.voxel.copy()
    beyond[:, axis] += outward
    inside = (beyond[:, axis] >= 0) & (beyond[:, axis] < part.grid.shape[axis])
    outer = tuple(np.clip(beyond, 0, np.array(part.grid.shape) - 1).T)
    if part.distance is not None:
        near = part.distance[inner].astype(np.float64)
        far = part.distance[outer].astype(np.float64)
        crosses = inside & (near < 0) & (far > 0)
        share = np.divide(near, near - far, out=np.full(len(near), 0.5), where=crosses)
        # Beyond the grid, or where the voxel's centre is outside the shape, the slope helps out.
        step = 16.0 * h / min(part.grid.spacing) * np.maximum(outward * faces.normal[:, axis], 0.5)
        offset = np.where(crosses, share - 0.5, -near / step - 0.5)
    elif part.occupancy is not None:
        fill = part.occupancy / 255.0
        offset = fill[inner] - 1.0 + np.where(inside, fill[outer], 0.0)
    else:
        return base
    return np.asarray(base + outward * h * np.clip(offset, -1.0, 1.0))


def _slope(height: Double, axis: int, h: float, step: float) -> Double:
    """Slope of a height map, from the neighbours that belong to the same surface."""
    padded = np.pad(height, 1, constant_values=np.nan)
    ahead = np.roll(padded, -1, axis)[1:-1, 1:-1] - height
    behind = height - np.roll(padded, 1, axis)[1:-1, 1:-1]
    both = np.stack([ahead, behind])
    good = np.abs(both) <= step  # False where nan
    count = good.sum(axis=0)
    return np.asarray(np.where(good, both, 0.0).sum(axis=0) / np.maximum(count, 1) / h)


def _node_heights(height: Double, at: Ints, own: Double, step: float) -> Double:
    """Height of nodes ``at`` (m, 2) of the map, whose own faces have the mean height `own`."""
    padded = np.pad(height, 2, constant_values=np.nan)
    u, v = at.T
    patch = np.stack([[padded[u + a, v + b] for b in range(4)] for a in range(4)])
    four = patch[1:3, 1:3].reshape(4, -1)
    good = np.abs(four - own) <= step
    mean = np.where(good, four, 0.0).sum(axis=0) / np.maximum(good.sum(axis=0), 1)
    mean = np.where(good.any(axis=0), mean, own)
    smooth = np.all(np.abs(patch - own) <= 2 * step, axis=(0, 1)) & good.all(axis=0)
    fine = np.einsum("a,b,abm->m", _MIDDLE, _MIDDLE, np.where(smooth, patch, 0.0))
    return np.asarray(np.where(smooth, fine, mean))


def touch_surface(part: Part, indenter: Indenter) -> TouchSurface:
    """Find what of a part an indenter can touch.

    Raises
    ------
    InputError
        Where it passes by the part altogether.
    """
    axis, sign = parse_side(indenter.push, indenter.name)
    a, b = across(indenter.push)
    grid = part.grid
    every = exposed_faces(part)
    faces = every.select((every.axis == axis) & (every.side == -sign))
    if len(faces):
        faces = faces.select(visible_from(part, faces, axis, -sign))
    if not len(faces):
        raise InputError(f"Indenter '{indenter.name}': the part is empty.")
    columns = faces.voxel[:, [a, b]]
    crossing = _face_heights(part, faces, axis, -sign)
    height = np.full((grid.shape[a], grid.shape[b]), np.nan)
    height[tuple(columns.T)] = crossing
    step = _STEP * grid.spacing[axis]
    tilt = [_slope(height, n, grid.spacing[d], step) for n, d in enumerate((a, b))]
    stretch = np.sqrt(1.0 + tilt[0] ** 2 + tilt[1] ** 2)[tuple(columns.T)]

    nodes = np.repeat(faces.voxel[:, None], 4, axis=1)
    nodes[:, :, axis] += -sign > 0
    nodes[:, 1::2, a] += 1
    nodes[:, 2:, b] += 1
    node, number = np.unique(nodes.reshape(-1, 3), axis=0, return_inverse=True)
    corners = number.reshape(-1, 4)
    m = len(node)

    def gathered(value: Double) -> Double:
        return np.bincount(corners.ravel(), weights=np.repeat(value, 4), minlength=m) / 4.0

    own = gathered(crossing) / gathered(np.ones(len(faces)))
    points = np.column_stack([c[n] for c, n in zip(grid.nodes(), node.T, strict=True)])
    points[:, axis] = _node_heights(height, node[:, [a, b]], own, step)
    gap, normal = indenter.gap(points)
    middles = faces.centre.copy()
    middles[:, axis] = crossing
    touch = min(float(gap.min()), float(indenter.gap(middles)[0].min()))
    if not np.isfinite(gap).any():
        raise InputError(
            f"Indenter '{indenter.name}', pushed along {indenter.push} from {indenter.position} "
            f"mm, passes by every node of the part. Move it over the part; one narrower than a "
            f"voxel needs smaller voxels."
        )
    nx, ny, _ = grid.node_shape
    return TouchSurface(
        axis=axis,
        sign=sign,
        node=node,
        flat=(node[:, 2] * ny + node[:, 1]) * nx + node[:, 0],
        area=gathered(faces.area),
        true_area=gathered(faces.area * stretch),
        gap=gap - touch,
        lean=sign * normal[:, axis],
        touch=touch,
        corners=corners,
    )

"""The surface that an indenter sees: its nodes, where they truly lie, and the area of each.

Seen along the push the part is a height field, one voxel face a column. The height of each face
comes from the signed distance (or the filled fraction) and not from the voxel's edge, so that the
stairs of the grid are no part of the gap; a node lies where the heights round it say.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.ndimage
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.indenter import Indenter, across
from voxelmat.model.part import DISTANCE_STEPS, Part
from voxelmat.model.region import parse_side
from voxelmat.model.surface import Faces, exposed_faces, visible_from

__all__ = ["TouchSurface", "touch_surface"]

Double = NDArray[np.float64]
Ints = NDArray[np.intp]

# Neighbouring columns are of one surface up to this many voxels of rise where the slope goes on,
# and up to the smaller number anywhere; ours.
_STEP, _FLAT = 1.5, 0.25
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
        total = np.bincount(near[:, 0], weights=value[near[:, 1]], minlength=len(value))
        return np.asarray(total, dtype=np.float64)


def _face_heights(part: Part, faces: Faces, axis: int, outward: int) -> Double:
    """Coordinate along the axis where the true surface crosses the column of each face, mm."""
    h = part.grid.spacing[axis]
    base = faces.centre[:, axis]
    inner = tuple(faces.voxel.T)
    top = part.grid.shape[axis] - 1
    beyond, before = faces.voxel.copy(), faces.voxel.copy()
    beyond[:, axis] += outward
    before[:, axis] = np.clip(before[:, axis] - outward, 0, top)
    inside = (beyond[:, axis] >= 0) & (beyond[:, axis] <= top)
    beyond[:, axis] = np.clip(beyond[:, axis], 0, top)
    outer = tuple(beyond.T)
    if part.distance is not None:
        level = part.distance
        near = level[inner].astype(np.float64)
        # Change over one voxel outwards; at the edge of the grid the change over the last one.
        rate = np.where(inside, level[outer] - near, near - level[tuple(before.T)])
        full = DISTANCE_STEPS * h / min(part.grid.spacing)
        # Beside a corner the nearest surface may be another one: then as if the face were flat.
        offset = -near / np.where(rate >= 0.5 * full, rate, full) - 0.5
    elif part.occupancy is not None:
        fill = part.occupancy / 255.0
        offset = fill[inner] - 1.0 + np.where(inside, fill[outer], 0.0)
    else:
        return base
    return np.asarray(base + outward * h * np.clip(offset, -1.0, 1.0))


def _joined(height: Double, axis: int, h: float) -> NDArray[np.bool_]:
    """Whether neighbouring columns along an axis of the map belong to one smooth surface.

    A slope goes on beyond a pair of columns, on one side at least; a step does not.
    """
    jump = np.abs(np.diff(height, axis=axis))
    known = np.isfinite(jump)
    wide = [(0, 0), (0, 0)]
    wide[axis] = (1, 1)
    padded = np.moveaxis(np.pad(np.where(known, jump, 0.0), wide), axis, 0)
    beside = np.moveaxis(np.maximum(padded[:-2], padded[2:]), 0, axis)
    limit = np.minimum(_FLAT * h + 2.0 * beside, _STEP * h)
    return np.asarray(known & (np.where(known, jump, np.inf) <= limit))


def _slope(height: Double, axis: int, joined: NDArray[np.bool_], h: float) -> Double:
    """Slope of a height map at each column, from the neighbours that it is joined to."""
    rise = np.moveaxis(np.where(joined, np.diff(height, axis=axis), 0.0), axis, 0)
    here = np.moveaxis(joined, axis, 0).astype(float)
    edge = [(1, 1), (0, 0)]
    rise, here = np.pad(rise, edge), np.pad(here, edge)
    total, count = rise[1:] + rise[:-1], here[1:] + here[:-1]
    return np.asarray(np.moveaxis(total / np.maximum(count, 1.0) / h, 0, axis))


def _node_heights(height: Double, at: Ints, own: Double, joined: list[NDArray[np.bool_]]) -> Double:
    """Height of nodes ``at`` (m, 2) of the map; `own` (m,), that of their faces, at a step."""
    u, v = at.T
    along_u, along_v = (np.pad(j, 1) for j in joined)
    smooth = along_u[:, :-1] & along_u[:, 1:] & along_v[:-1] & along_v[1:]
    finer = scipy.ndimage.binary_erosion(smooth, np.ones((3, 3), dtype=bool))[u, v]
    padded = np.pad(height, 2, constant_values=np.nan)
    patch = np.stack([[padded[u + a, v + b] for b in range(4)] for a in range(4)])
    out = np.where(smooth[u, v], patch[1:3, 1:3].mean(axis=(0, 1)), own)
    fine = np.einsum("a,b,abm->m", _MIDDLE, _MIDDLE, np.where(finer, patch, 0.0))
    return np.asarray(np.where(finer, fine, out))


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
    known = part.distance is not None or part.occupancy is not None
    joined = [_joined(height, n, grid.spacing[axis]) for n in (0, 1)]
    tilt = [_slope(height, n, joined[n], grid.spacing[d]) for n, d in enumerate((a, b))]
    stretch = np.sqrt(1.0 + tilt[0] ** 2 + tilt[1] ** 2)[tuple(columns.T)] if known else 1.0

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
    points[:, axis] = own
    if known:
        points[:, axis] = _node_heights(height, node[:, [a, b]], own, joined)
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

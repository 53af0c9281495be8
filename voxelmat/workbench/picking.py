"""From a point of the picture to a place on the part: the nearest face on a line of sight."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.model.grid import VoxelGrid
from voxelmat.model.surface import Faces
from voxelmat.workbench.voxfaces import Quads, corner_nodes

__all__ = ["Hit", "corners_of", "first_cell", "nearest_quad"]

Double = NDArray[np.float64]
_SAMPLES = 4  # along a voxel


@dataclass(frozen=True, slots=True, kw_only=True)
class Hit:
    """What was pointed at.

    Attributes
    ----------
    place_mm : tuple of float
        On the surface of the part as it is before it deforms.
    voxel : tuple of int
        The voxel behind it, on the part's own grid.
    drawn_mm : tuple of float
        Where the picture shows that place.
    axis, side : int
        Which way the face looks: along 0, 1 or 2, up (1) or down (-1).
    """

    place_mm: tuple[float, float, float]
    voxel: tuple[int, int, int]
    drawn_mm: tuple[float, float, float]
    axis: int
    side: int


def corners_of(grid: VoxelGrid, faces: Faces) -> Double:
    """Corners of faces that have not moved, mm, shape (n, 4, 3)."""
    nodes = corner_nodes(faces)
    return np.asarray(np.array(grid.origin) + nodes * np.array(grid.spacing))


def nearest_quad(quads: Quads, axes: Double, right: float, up: float) -> tuple[int, Double] | None:
    """The quadrilateral nearest to the viewer on a line of sight.

    Parameters
    ----------
    quads : Quads
    axes : ndarray, shape (3, 3)
        Right, up and towards the viewer, as rows.
    right, up : float
        The line of sight, mm along the first two.

    Returns
    -------
    tuple of (int, ndarray of shape (4,)) or None
        Its index, and the weights of its corners that give the point.
    """
    if not len(quads):
        return None
    u = (quads.points @ axes[0].astype(np.float32)).reshape(-1, 4) - np.float32(right)
    v = (quads.points @ axes[1].astype(np.float32)).reshape(-1, 4) - np.float32(up)
    near = np.flatnonzero(
        (u.min(axis=1) <= 0) & (u.max(axis=1) >= 0) & (v.min(axis=1) <= 0) & (v.max(axis=1) >= 0)
    )
    best, answer = -np.inf, None
    for n in near:
        corners = quads.points[4 * n : 4 * n + 4].astype(float)
        flat = corners @ axes.T - (right, up, 0.0)
        for triangle in ((0, 1, 2), (0, 2, 3)):
            weights = _weights(flat[list(triangle), :2])
            if weights is None:
                continue
            depth = float(weights @ flat[list(triangle), 2])
            if depth > best:
                full = np.zeros(4)
                full[list(triangle)] = weights
                best, answer = depth, (int(n), full)
    return answer


def _weights(corners: Double) -> Double | None:
    """Weights of a triangle's corners (3, 2) that give the origin; None where it lies outside."""
    (ax, ay), (bx, by), (cx, cy) = corners
    area = (bx - ax) * (cy - ay) - (by - ay) * (cx - ax)
    if abs(area) < 1e-12:
        return None
    found = np.array([bx * cy - by * cx, cx * ay - cy * ax, ax * by - ay * bx]) / area
    return found if found.min() >= -1e-6 else None


def first_cell(
    grid: VoxelGrid,
    stays: Callable[[NDArray[np.intp]], NDArray[np.bool_]],
    start: Double,
    direction: Double,
    length: float,
) -> tuple[Double, NDArray[np.intp]] | None:
    """The first voxel on a line for which `stays` holds, to a quarter of a voxel.

    Parameters
    ----------
    grid : VoxelGrid
    stays : callable
        One bool for each of some voxels (n, 3), all within the grid.
    start, direction : ndarray, shape (3,)
        mm; the direction has length 1.
    length : float
        How far to look, mm.
    """
    step = min(grid.spacing) / _SAMPLES
    along = np.arange(0.0, length, step)
    points = start + along[:, None] * direction
    cells = np.floor((points - np.array(grid.origin)) / np.array(grid.spacing)).astype(np.intp)
    inside = ((cells >= 0) & (cells < np.array(grid.shape))).all(axis=1)
    points, cells = points[inside], cells[inside]
    found = np.flatnonzero(stays(cells))
    if not len(found):
        return None
    return points[found[0]], cells[found[0]]

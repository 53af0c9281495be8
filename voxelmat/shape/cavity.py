"""The cavity that a bought-in body leaves in a print, with its clearance."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from voxelmat.errors import InputError
from voxelmat.shape.gaps import slopes
from voxelmat.shape.voxelise import BAND_SIXTEENTHS, VoxelShape
from voxelmat.units import number

__all__ = ["below_plane", "cut_cavity"]


def below_plane(
    height: NDArray[np.float64], normal: NDArray[np.float64], spacing: ArrayLike
) -> NDArray[np.float64]:
    """Fraction of a voxel on the inner side of a plane.

    Parameters
    ----------
    height : (n,) float64
        Signed distance from the plane to the voxel centre, mm; negative inside.
    normal : (n, 3) float64
        Unit normals, outwards.
    spacing : three floats
        Voxel edges, mm.

    Notes
    -----
    The volume under a plane in a box by inclusion and exclusion of its corners, as in
    volume-of-fluid methods (Scardovelli & Zaleski 2000, J. Comput. Phys. 164:228-237).
    """
    reach = np.abs(normal) * np.asarray(spacing, dtype=float)
    # A plane along an axis would divide by 0; this floor moves the result by under 0.1 %.
    reach = np.maximum(reach, 1e-3 * reach.max(axis=1, keepdims=True))
    total = reach.sum(axis=1)
    level = np.clip(total / 2 - height, 0, total)
    a, b, c = reach.T
    volume = level**3
    for corner, sign in ((a, -1), (b, -1), (c, -1), (a + b, 1), (b + c, 1), (a + c, 1)):
        volume = volume + sign * np.maximum(level - corner, 0) ** 3
    volume = volume - np.maximum(level - total, 0) ** 3
    fraction: NDArray[np.float64] = np.clip(volume / (6 * a * b * c), 0, 1)
    return fraction


def cut_cavity(
    shape: VoxelShape,
    clearance_mm: float,
    distance: NDArray[np.int8],
    occupancy: NDArray[np.uint8],
    *,
    name: str,
) -> None:
    """Take a bought-in body and its clearance out of a print, in place.

    Parameters
    ----------
    shape : VoxelShape
        The bought-in body.
    clearance_mm : float
        Play on every side, mm.
    distance, occupancy : (nx, ny, nz)
        Of the printed bodies; changed.
    name : str
        The body's name, for the message.
    """
    unit = min(shape.grid.spacing) / 16
    play = clearance_mm / unit
    if play > BAND_SIXTEENTHS - 32:
        raise InputError(
            f"Body '{name}': a clearance of {number(clearance_mm)} mm is too wide at this "
            f"spacing; at most {number((BAND_SIXTEENTHS - 32) * unit)} mm can be cut. Use larger "
            "voxels, or model the cavity in the mesh."
        )
    near = np.nonzero(shape.distance < BAND_SIXTEENTHS)
    cut = np.rint(play - shape.distance[near].astype(float))
    distance[near] = np.maximum(distance[near], np.clip(cut, -BAND_SIXTEENTHS, BAND_SIXTEENTHS))
    if clearance_mm == 0:
        left = 255 - shape.occupancy[near]
    else:
        height = (shape.distance[near].astype(float) - play) * unit
        normal = slopes(shape.distance, near, shape.grid)
        # Deep inside the distance is flat and has no direction; any will do there.
        normal[~normal.any(axis=1)] = (1.0, 0.0, 0.0)
        left = np.rint(255 * (1 - below_plane(height, normal, shape.grid.spacing)))
    occupancy[near] = np.minimum(occupancy[near], left.astype(np.uint8))

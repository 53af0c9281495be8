"""Averages of a static result over a region: its motion as a body, its stress and strain."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.region import Region
from voxelmat.model.result import StaticResult

__all__ = ["RegionMotion", "mean_motion", "mean_strain", "mean_stress"]

Double = NDArray[np.float64]
Vector = tuple[float, float, float]
Six = tuple[float, float, float, float, float, float]

# A rotation counts as known where it moves the nodes by at least this share of the largest.
_KNOWN = 1e-9


@dataclass(frozen=True, slots=True, kw_only=True)
class RegionMotion:
    """The rigid motion nearest to that of a region.

    Attributes
    ----------
    centre : tuple of float
        Mean place of its nodes, mm.
    translation : tuple of float
        Of the centre: the mean displacement, mm.
    rotation : tuple of float
        About x, y, z, radians; 0 about the line that the nodes lie on, where they lie on one.
    left : float
        Root mean square displacement of the nodes that this motion does not explain, mm.
    """

    centre: Vector
    translation: Vector
    rotation: Vector
    left: float


def _three(v: Double) -> Vector:
    return float(v[0]), float(v[1]), float(v[2])


def mean_motion(result: StaticResult, region: Region) -> RegionMotion:
    """Fit a small rigid motion to the nodes of a region by least squares, all nodes alike.

    Raises
    ------
    InputError
        Where the region holds no node of the part.
    """
    nodes = region.nodes(result.part)
    if not nodes.any():
        raise InputError(f"Region '{region.name}' holds no node of the part.")
    at = np.nonzero(nodes)
    place = np.stack([c[n] for c, n in zip(result.part.grid.nodes(), at, strict=True)], axis=1)
    u = result.displacement[nodes]
    centre, mean = place.mean(axis=0), u.mean(axis=0)
    r, rest = place - centre, u - mean
    # Moment and inertia of points of unit mass: J w = sum r x u.
    inertia = np.eye(3) * (r**2).sum() - r.T @ r
    spin = np.linalg.pinv(inertia, rcond=_KNOWN, hermitian=True) @ np.cross(r, rest).sum(axis=0)
    rest = rest - np.cross(spin, r)
    return RegionMotion(
        centre=_three(centre),
        translation=_three(mean),
        rotation=_three(spin),
        left=float(np.sqrt((rest**2).sum(axis=1).mean())),
    )


def _mean(result: StaticResult, field: NDArray[np.float32], region: Region) -> Six:
    """Mean of a voxel field, weighted by the material in each voxel."""
    inside = region.voxels(result.part)
    if not inside.any():
        raise InputError(f"Region '{region.name}' holds no voxel of the part.")
    weight = result.part.fill[inside].astype(np.float64)
    m = (weight[:, None] * field[inside]).sum(axis=0) / weight.sum()
    return float(m[0]), float(m[1]), float(m[2]), float(m[3]), float(m[4]), float(m[5])


def mean_stress(result: StaticResult, region: Region) -> Six:
    """Mean stress in the material of a region, by volume: xx, yy, zz, xy, xz, yz, MPa.

    Raises
    ------
    InputError
        Where the region holds no voxel of the part.
    """
    return _mean(result, result.stress, region)


def mean_strain(result: StaticResult, region: Region) -> Six:
    """Mean strain of a region by volume, thermal and initial strain included.

    Components are xx, yy, zz, xy, xz, yz, shear as engineering strain.

    Raises
    ------
    InputError
        Where the region holds no voxel of the part.
    """
    return _mean(result, result.strain, region)

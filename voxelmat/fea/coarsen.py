"""A part on a grid of about half as many voxels an axis, for estimates of the grid's error."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part

__all__ = ["coarsened"]

Double = NDArray[np.float64]
Bools = NDArray[np.bool_]


def _overlaps(fine: int, coarse: int) -> Double:
    """Share of each coarse cell that each fine one fills, (coarse, fine); rows sum to 1."""
    edges = np.arange(coarse + 1) * (fine / coarse)
    low = np.maximum(edges[:-1, None], np.arange(fine))
    high = np.minimum(edges[1:, None], np.arange(fine) + 1)
    return np.asarray(np.maximum(high - low, 0.0) * (coarse / fine))


def _mean(field: Double, shares: list[Double]) -> Double:
    for axis, share in enumerate(shares):
        field = np.moveaxis(np.tensordot(share, field, axes=(1, axis)), 0, axis)
    return field


def _labels(labels: NDArray[np.uint16], fill: Double, shares: list[Double]) -> NDArray[np.uint16]:
    """The label with most material in each coarse voxel; the lower one of equals."""
    shape = tuple(len(s) for s in shares)
    most, out = np.zeros(shape), np.zeros(shape, dtype=np.uint16)
    for label in np.unique(labels[fill > 0]):
        amount = _mean(np.where(labels == label, fill, 0.0), shares)
        better = amount > most + 1e-12
        most[better], out[better] = amount[better], label
    return out


def coarsened(part: Part) -> Part:
    """The part with about half as many voxels along each axis.

    The new grid spans the bounding box of the material exactly: an odd count n becomes
    (n + 1) / 2 voxels that are less than twice as large. A voxel takes the label with most
    material in it and the mean filled fraction; a single layer stays one.

    Raises
    ------
    InputError
        If the part is empty, or has one layer along every axis.
    """
    solid = part.solid
    if not solid.any():
        raise InputError("The part is empty: no voxel holds material.")
    found = [np.flatnonzero(solid.any(axis=tuple(b for b in range(3) if b != a))) for a in range(3)]
    box = tuple(slice(int(f[0]), int(f[-1]) + 1) for f in found)
    fine = tuple(s.stop - s.start for s in box)
    shape = ((fine[0] + 1) // 2, (fine[1] + 1) // 2, (fine[2] + 1) // 2)
    if max(fine) == 1:
        raise InputError("A part of one voxel cannot be coarsened.")
    shares = [_overlaps(n, m) for n, m in zip(fine, shape, strict=True)]
    h, origin = part.grid.spacing, part.grid.origin
    spacing = tuple(d * n / m for d, n, m in zip(h, fine, shape, strict=True))
    start = tuple(o + s.start * d for o, s, d in zip(origin, box, h, strict=True))
    fill = part.fill[box].astype(np.float64)
    labels = _labels(part.labels[box], fill, shares)
    occupancy = np.round(255 * _mean(fill, shares)).astype(np.uint8)
    labels[occupancy == 0] = 0
    whole = bool(np.all((occupancy == 255) == (labels > 0)))
    distance = None
    if part.distance is not None:
        scaled = _mean(part.distance[box].astype(np.float64), shares) * (min(h) / min(spacing))
        distance = np.clip(np.round(scaled), -127, 127).astype(np.int8)
    amount = np.maximum(_mean(fill, shares), 1e-12)
    bodies: dict[str, Bools] = {
        name: (_mean(np.where(mask[box], fill, 0.0), shares) >= 0.5 * amount) & (labels > 0)
        for name, mask in part.bodies.items()
    }
    return part.replace(
        grid=VoxelGrid(
            shape=shape,
            spacing=(spacing[0], spacing[1], spacing[2]),
            origin=(start[0], start[1], start[2]),
        ),
        labels=labels,
        occupancy=None if whole else occupancy,
        distance=distance,
        bodies=bodies,
    )

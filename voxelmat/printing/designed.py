"""What a design holds, counted slab by slab: its resins and their volumes."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from voxelmat.io.bigpart import AnyPart, z_slabs

__all__ = ["designed_volumes", "used_resins"]

_REACH = 2  # voxels round a bought-in body in which its clearance counts


def used_resins(part: AnyPart) -> tuple[str, ...]:
    """Names of the resins that the printer lays, in the order of ``part.resins``."""
    count = np.zeros(len(part.palette), np.int64)
    for first, last in z_slabs(part):
        for plane in part.labels[:, :, first:last].T:
            count += np.bincount(plane.ravel(), minlength=len(count))
    used = part.printed_labels() & (count > 0)
    table = part.palette_fractions()[used]
    return tuple(
        m.name for m, column in zip(part.resins, table.T, strict=True) if (column > 0).any()
    )


def designed_volumes(part: AnyPart) -> dict[str, float]:
    """Volume of each printed resin in the design, mm^3.

    The solid fraction of the voxels counts, except where only the signed distance knows what is
    printed: where there is no fraction, and round bought-in bodies, whose clearance is cut out
    of voxels that are else full. There a voxel whose centre lies on the outline counts half.
    """
    printed = part.printed_labels()
    count = np.zeros(len(part.palette))  # sums of whole numbers, so the slabs do not matter
    top = part.grid.shape[2]
    for first, last in z_slabs(part):
        low, high = max(first - _REACH, 0), min(last + _REACH, top)
        labels = part.labels[:, :, low:high]
        fill = _fill(part, labels, slice(low, high), printed)
        inner = slice(first - low, last - low)
        count += np.bincount(
            labels[:, :, inner].ravel(order="F"),
            weights=fill[:, :, inner].ravel(order="F"),
            minlength=len(count),
        )
    amount = (count * printed) @ part.palette_fractions() * (part.grid.voxel_volume / 255)
    return {m.name: float(v) for m, v in zip(part.resins, amount, strict=True)}


def _fill(
    part: AnyPart, labels: NDArray[np.uint16], planes: slice, printed: NDArray[np.bool_]
) -> NDArray[np.float32]:
    """Printed share of the voxels of some planes, 0 to 255 in whole numbers."""
    index = (slice(None), slice(None), planes)
    fill = np.full(labels.shape, 255, np.float32)
    if part.occupancy is not None:
        fill = part.occupancy[index].astype(np.float32)
    if part.distance is not None:
        cut = np.clip(127.5 - 255 / 16 * part.distance[index].astype(np.float32), 0, 255)
        if part.occupancy is None:
            fill = cut
        else:
            bought = ~printed[labels] & (labels > 0)
            if bought.any():
                near = ndimage.binary_dilation(bought, iterations=_REACH)
                fill = np.where(near, np.minimum(fill, cut), fill)
    return np.where(labels > 0, np.rint(fill), np.float32(0))

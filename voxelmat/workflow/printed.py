"""The part as the stack will print it, with bought-in bodies put back, ready to be solved again."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from voxelmat.model.blend import Blend
from voxelmat.model.part import Part
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.average import stack_to_part
from voxelmat.printing.readback import Stack

__all__ = ["as_printed"]


def as_printed(stack: Stack, part: Part, *, monitor: Monitor = SILENT) -> Part:
    """Average a stack back onto the design grid.

    Parameters
    ----------
    stack : Stack
        Read back from disk.
    part : Part
        That it was written from.
    monitor : Monitor

    Returns
    -------
    Part
        Blends and occupancy as counted in the stack. Bought-in bodies are as in `part`, and so
        is the occupancy of the voxels next to them: the clearance round a shaft is thinner
        than a voxel, and both solves take the shaft as seated without play, so that they
        differ by the halftone alone.
    """
    printed = stack_to_part(stack, part, monitor=monitor)
    bought = ~part.printed_labels()[part.labels] & part.solid
    if not bought.any():
        return printed
    ring = ndimage.binary_dilation(bought, iterations=2) & ~bought & part.solid
    labels, palette = _with_labels(printed, part, ring & (printed.labels == 0))
    occupancy = np.array(printed.occupancy, order="F")
    whole = part.occupancy if part.occupancy is not None else np.uint8(255) * part.solid
    occupancy[ring] = whole[ring]
    return printed.replace(labels=labels, palette=palette, occupancy=occupancy)


def _with_labels(
    printed: Part, part: Part, where: NDArray[np.bool_]
) -> tuple[NDArray[np.uint16], tuple[Blend, ...]]:
    """Take labels from `part` where the print has none, adding their blends to the palette."""
    labels = np.array(printed.labels, order="F")
    palette = list(printed.palette)
    place = {blend: n for n, blend in enumerate(palette)}
    for old in np.unique(part.labels[where]):
        blend = part.palette[old]
        if blend not in place:
            place[blend] = len(palette)
            palette.append(blend)
        labels[where & (part.labels == old)] = place[blend]
    return labels, tuple(palette)

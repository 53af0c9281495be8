"""A stack averaged back to the design grid: what the printer will lay in each design voxel."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from voxelmat.errors import InputError
from voxelmat.kernels.bitplane import add_to_voxels, to_words
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.bias import as_it_comes_out, part_bias
from voxelmat.printing.raster import Raster
from voxelmat.printing.readback import Stack

__all__ = ["AveragedStack", "average", "stack_to_part"]

#: Fractions read back are rounded to 1/64; with many resins coarser, until the palette fits.
_LEVELS = (64, 32, 16, 8)
_MOST_BLENDS = 65535


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class AveragedStack:
    """Fields on a design grid, indexed ``[i, j, k]``, x fastest in memory.

    Attributes
    ----------
    grid : VoxelGrid
    resins : tuple of str
        Of the model channels.
    filled : tuple of ndarray of float32
        One a resin: share of each voxel's volume that it fills. Support counts as empty.
    """

    grid: VoxelGrid
    resins: tuple[str, ...]
    filled: tuple[NDArray[np.float32], ...]

    @property
    def occupancy(self) -> NDArray[np.float32]:
        """Solid share of each voxel, 0 to 1."""
        return np.asfortranarray(np.minimum(sum(self.filled), np.float32(1.0)), dtype=np.float32)

    def fractions(self) -> tuple[NDArray[np.float32], ...]:
        """Volume fraction of each resin in the solid share; 0 where there is no solid."""
        solid = sum(self.filled)
        safe = np.where(solid > 0, solid, 1)
        return tuple(np.asfortranarray(f / safe, dtype=np.float32) for f in self.filled)


def _shares(
    raster: Raster, grid: VoxelGrid, image_axis: int
) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """First voxel that each site overlaps (counted from one before the grid), and two shares.

    A share is the part of the *voxel's* edge that the site covers. Voxel 0 of the result is a
    margin on the low side, voxel n + 1 one on the high side.
    """
    tray = raster.image_axes[image_axis][0]
    part = raster.part_axes()[image_axis][0]
    pitch, spacing = float(raster.pitch[tray]), grid.spacing[part]
    if pitch > spacing * (1 + 1e-9):
        raise InputError(
            f"The design voxels ({spacing:g} mm along part axis {'xyz'[part]}) are smaller than "
            f"the printer's pitch there ({pitch:g} mm), so a voxel holds no whole site to average. "
            "Use larger voxels or a finer printer."
        )
    width = pitch / spacing
    low = raster.image_index(grid, image_axis) + 0.5 - width / 2  # in voxels; 0 is the grid's edge
    first = np.floor(low + 1e-9)
    over = np.clip(low + width - (first + 1), 0.0, width)
    shares = np.stack([width - over, over], axis=1)
    n = grid.shape[part]
    shares[over <= 1e-12] = (width, 0.0)
    return np.clip(first + 1, 0, n + 1).astype(np.int64), shares


def _columns(
    at: NDArray[np.int64], shares: NDArray[np.float64], voxels: int
) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.float64]]:
    """For each voxel: first and last whole site, the site that straddles its end, its shares."""
    crosses = shares[:, 1] > 0
    whole = np.zeros((voxels, 2), dtype=np.int64)
    straddle = np.full(voxels, -1, dtype=np.int64)
    share = np.zeros((voxels, 2))
    sites = np.flatnonzero(~crosses)
    whole[:, 0] = np.searchsorted(at[sites], np.arange(voxels), "left")
    whole[:, 1] = np.searchsorted(at[sites], np.arange(voxels), "right")
    some = whole[:, 1] > whole[:, 0]
    first, last = sites[whole[some, 0]], sites[whole[some, 1] - 1] + 1
    whole[:] = 0
    whole[some, 0], whole[some, 1] = first, last
    straddle[at[crosses]] = np.flatnonzero(crosses)
    share[at[crosses]] = shares[crosses]
    return whole, straddle, share


def average(
    stack: Stack, grid: VoxelGrid, *, part: int | str = 0, monitor: Monitor = SILENT
) -> AveragedStack:
    """Average a stack back to a design grid, the print transform undone.

    Every site counts for the voxels that it overlaps by the share of the overlap, so volumes
    are kept to rounding. One layer is in memory at a time.

    Parameters
    ----------
    stack : Stack
    grid : VoxelGrid
        Usually that of the part; its voxels must not be smaller than the pitch.
    part : int or str
        Number or name of the part whose window is averaged.
    monitor : Monitor

    Raises
    ------
    InputError
        If a voxel edge is shorter than the pitch along it.
    FileFormatError
        If a layer is missing or not the one that was written.
    """
    raster = stack.part(part).raster
    resins = tuple(dict.fromkeys(c.resin for c in stack.channels if c.role == "model"))
    sharing = [
        [m for m, c in enumerate(stack.channels) if c.role == "model" and c.resin == resin]
        for resin in resins
    ]
    (layer_at, layer_w), (row_at, row_w), (column_at, column_w) = (
        _shares(raster, grid, axis) for axis in range(3)
    )
    shape = [grid.shape[a] for a, _ in raster.part_axes()]
    # Four spare entries: a margin on the low side, two on the high side and one for the carry.
    total = np.zeros((len(resins), shape[0] + 3, shape[1] + 3, shape[2] + 3), dtype=np.float32)
    plane = np.zeros(total.shape[2:])
    whole, straddle, share = _columns(column_at, column_w, shape[2] + 2)
    width = float(column_w.sum(axis=1)[0])
    words = np.zeros((raster.image_shape[1], (raster.image_shape[2] + 63) // 64), dtype=np.uint64)
    n_layers = raster.image_shape[0]
    for layer in range(n_layers):
        bits = stack.part_bits(part, layer)
        for m, channels in enumerate(sharing):
            plane[:] = 0.0
            to_words(np.bitwise_or.reduce(bits[channels], axis=0), words)
            add_to_voxels(words, row_at, row_w, whole, width, straddle, share, plane)
            for side in range(2):
                if layer_w[layer, side] > 0:
                    total[m, layer_at[layer] + side] += layer_w[layer, side] * plane
        monitor.report("averaging layers", done=layer + 1, total=n_layers)
    inner = total[:, 1 : shape[0] + 1, 1 : shape[1] + 1, 1 : shape[2] + 1]
    return AveragedStack(
        grid=grid,
        resins=resins,
        filled=tuple(raster.to_part(f) for f in inner),
    )


def _rounded(fractions: NDArray[np.float64], levels: int) -> NDArray[np.int64]:
    """Rows of fractions as whole numbers of 1/levels that sum to `levels`: largest remainder."""
    scaled = fractions * levels
    base = np.floor(scaled + 1e-6)
    short = (levels - base.sum(axis=1)).astype(int)
    order = np.argsort(-(scaled - base), axis=1, kind="stable")
    place = np.argsort(order, axis=1, kind="stable")
    return np.asarray(base + (place < short[:, None]), dtype=np.int64)


def _distinct(rows: NDArray[np.int64], levels: int) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """The distinct rows in ascending order, and which of them each row is.

    As ``numpy.unique(axis=0)``, but a column at a time on whole numbers, which is many times
    faster; numbers stay below (rows) x (levels + 1).
    """
    code = np.zeros(len(rows), dtype=np.int64)
    for column in rows.T:
        _, code = np.unique(code * (levels + 1) + column, return_inverse=True)
    _, first = np.unique(code, return_index=True)
    return rows[first], code


def stack_to_part(
    stack: Stack, part: Part, *, which: int | str = 0, monitor: Monitor = SILENT
) -> Part:
    """The part as the printer will lay it, on the grid of `part`.

    Where the stack was compensated for a bias of the printer, the outline is that which comes
    out of it: the design's, wherever droplets are laid for it.

    Parameters
    ----------
    stack : Stack
        Written from `part`.
    part : Part
        Gives grid, resins and law. Its bought-in bodies stay as they are.
    which : int or str
        Number or name of the part on the tray.
    monitor : Monitor

    Returns
    -------
    Part
        Labels point at a palette of fractions in steps of 1/64 (coarser where more than 65535
        blends would be needed); occupancy in steps of 1/255. It has no signed distance.

    Raises
    ------
    InputError
        If the part has not the resins of the stack.
    """
    known = [m.name for m in part.resins]
    for channel in stack.channels:
        if channel.role == "model" and channel.resin not in known:
            raise InputError(f"The stack lays '{channel.resin}', which the part does not know.")
    averaged = average(stack, part.grid, part=which, monitor=monitor)
    bias = part_bias(stack.profile, stack.part(which).raster.rotation)
    if any(bias):
        fractions, occupancy = as_it_comes_out(averaged.filled, part, bias)
    else:
        fractions = averaged.fractions()
        occupancy = np.rint(averaged.occupancy * 255).astype(np.uint8)
    if len(stack.parts) > 1:  # a neighbour may reach into the window
        occupancy[~ndimage.binary_dilation(part.labels > 0)] = 0
    solid = occupancy > 0
    table = np.stack([f[solid] for f in fractions], axis=1).astype(np.float64)
    for levels in _LEVELS:
        steps, inverse = _distinct(_rounded(table, levels), levels)
        if len(steps) <= _MOST_BLENDS:
            break
    else:
        raise InputError("The stack holds more than 65535 blends even in steps of 1/8.")
    blends = [Blend.of(zip(averaged.resins, map(float, row), strict=True)) for row in steps]
    labels = np.zeros(part.grid.shape, dtype=np.uint32, order="F")
    labels[solid] = inverse + 1
    palette = [EMPTY, *blends]
    bought = ~part.printed_labels()[part.labels] & part.solid
    if bought.any():
        palette += [b for b, p in zip(part.palette, part.printed_labels(), strict=True) if not p][
            1:
        ]
        place = {b: n for n, b in enumerate(palette)}
        labels[bought] = [place[part.palette[v]] for v in part.labels[bought]]
        occupancy[bought] = 255 if part.occupancy is None else part.occupancy[bought]
    return part.replace(
        palette=tuple(palette),
        labels=labels,
        distance=None,
        occupancy=occupancy,
        name=f"{part.name}, as printed",
    )

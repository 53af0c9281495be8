"""Interfaces that are dithered over a width: how far each design voxel is from them."""

from __future__ import annotations

import itertools
import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.io.bigpart import AnyPart
from voxelmat.kernels.ramp import interface_distance
from voxelmat.model.halftone import Halftone
from voxelmat.printing.planes import DesignPlanes
from voxelmat.printing.raster import Raster

__all__ = ["MOST_VOXELS", "InterfaceRamps", "RampPlane"]

#: Half a width may reach over so many voxels; a wider blend is one to be designed.
MOST_VOXELS = 40


@dataclass(frozen=True, slots=True)
class RampPlane:
    """One design plane.

    Attributes
    ----------
    place : ndarray of float32, shape (rows, columns)
        Distance from the interface over its width, positive towards the pair's first resin.
    pair : ndarray of uint8, same shape
        Which interface, from 1; 0 where none is near.
    """

    place: NDArray[np.float32]
    pair: NDArray[np.uint8]


class InterfaceRamps:
    """Where the interfaces between pure zones are that a halftone dithers over a width.

    Parameters
    ----------
    part : Part or StoredPart
    raster : Raster
    order : sequence of str
        Resins in the order of laying.
    halftone : Halftone

    Attributes
    ----------
    pairs : list of tuple of int
        Positions in `order` of the two resins of each pair, ascending.

    Raises
    ------
    InputError
        If a width names a resin that the part does not have, or reaches over too many voxels,
        or if there are more than 254 pairs.

    Notes
    -----
    The distance is measured to the faces between voxels of the two zones, so zones that only
    lie near each other across a gap are not mixed. It is exact for flat interfaces along the
    grid. Along oblique ones, which the voxels draw as steps, it is short by up to a third of a
    voxel on either side, so the ramp is wider by that; with widths of one voxel or less the
    steps themselves stay visible.
    """

    def __init__(
        self, part: AnyPart, raster: Raster, order: Sequence[str], halftone: Halftone
    ) -> None:
        self._check_names(order, halftone)
        axes = [a for a, _ in raster.part_axes()]
        self._spacing = np.array([part.grid.spacing[a] for a in axes])
        rank = {name: q + 1 for q, name in enumerate(order)}
        self._zone = np.zeros(len(part.palette), dtype=np.uint8)
        for label, blend in enumerate(part.palette):
            if blend.is_pure and blend.fractions[0][0] in rank:
                self._zone[label] = rank[blend.fractions[0][0]]
        site = min(float(p) for p in raster.pitch)
        pure = sorted(set(self._zone[self._zone > 0].tolist()))
        widths = {
            (a - 1, b - 1): halftone.width_between(order[a - 1], order[b - 1])
            for a, b in itertools.combinations(pure, 2)
        }
        widths = {pair: width for pair, width in widths.items() if width >= site}
        if len(widths) > 254:
            raise InputError(
                f"{len(widths)} pairs of resins would have a dithered interface; at most 254 "
                "can. Give widths for the pairs that need one.",
                key="interface_width_mm",
            )
        self.pairs = list(widths)
        self._width = np.array([1.0, *widths.values()])
        # A cell is dithered where all its corners know their distance, so it must be known one
        # diagonal beyond the ramp.
        limit = self._width / 2 + float(np.linalg.norm(self._spacing))
        self._limit = limit
        most = float(self._width.max()) / 2 if widths else 0.0
        if most > MOST_VOXELS * self._spacing.min():
            raise InputError(
                f"An interface width of {2 * most:g} mm reaches over more than {MOST_VOXELS} "
                f"voxels of {self._spacing.min():g} mm on either side; design a graded zone "
                "instead.",
                key="interface_width_mm",
            )
        self._reach = np.array(
            [math.floor(limit.max() / h + 0.5) for h in self._spacing], dtype=np.int64
        )
        self._pair_of = np.zeros((len(order) + 1,) * 2, dtype=np.uint8)
        for number, (a, b) in enumerate(self.pairs, start=1):
            self._pair_of[a + 1, b + 1] = self._pair_of[b + 1, a + 1] = number

    @staticmethod
    def _check_names(order: Sequence[str], halftone: Halftone) -> None:
        for name in halftone.width_names:
            if name not in order:
                raise InputError(
                    f"An interface width names resin '{name}', which is not printed; the printed "
                    f"resins are {', '.join(sorted(order))}.",
                    key="interface_width_mm",
                )

    def plane(self, planes: DesignPlanes, k: int, extended: NDArray[np.uint16]) -> RampPlane:
        """The distances of one design plane.

        Parameters
        ----------
        planes : DesignPlanes
        k : int
        extended : ndarray of uint16, shape (rows, columns)
            Labels of plane `k`, carried one voxel beyond the part.
        """
        n = planes.n_planes
        k = min(k, n - 1)
        first = max(k - int(self._reach[0]) - 1, 0)
        labels = planes.raw_labels(first, min(k + int(self._reach[0]) + 2, n))
        for axis in (1, 2):  # a design axis of one voxel stands doubled in `extended`
            if labels.shape[axis] < extended.shape[axis - 1]:
                labels = np.repeat(labels, 2, axis=axis)
        distance = np.empty(extended.shape, dtype=np.float64)
        pair = np.empty(extended.shape, dtype=np.uint8)
        interface_distance(
            labels, k - first, extended, self._zone, self._pair_of, self._limit, self._spacing,
            self._reach, distance, pair,
        )  # fmt: skip
        head = np.array([0, *(a + 1 for a, _ in self.pairs)], dtype=np.uint8)
        sign = np.where(self._zone[extended] == head[pair], 1.0, -1.0)
        place = np.where(pair > 0, sign * distance / self._width[pair], 0.0)
        return RampPlane(place.astype(np.float32), pair)

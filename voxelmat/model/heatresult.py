"""What heat conduction found: temperature, flux, and where the heat comes from and goes."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.heatcase import HeatCase
from voxelmat.model.part import Part
from voxelmat.model.region import Region
from voxelmat.model.result import Extreme
from voxelmat.provenance import Provenance

__all__ = ["HeatResult", "TransientHeatResult", "corner_mean", "interpolate"]

Double = NDArray[np.float64]


def corner_mean(nodes: NDArray[Any]) -> NDArray[Any]:
    """Mean over the 8 corners of every voxel of a node field ``[i, j, k]``."""
    out = nodes
    for axis in range(3):
        low, high = [slice(None)] * 3, [slice(None)] * 3
        low[axis], high[axis] = slice(None, -1), slice(1, None)
        out = 0.5 * (out[tuple(low)] + out[tuple(high)])
    return out


def interpolate(part: Part, nodes: NDArray[Any], point: tuple[float, float, float]) -> float:
    """Trilinear value of a node field ``[i, j, k]`` at a point, mm.

    Raises
    ------
    InputError
        Where the point lies outside the grid or in a voxel without a temperature.
    """
    grid = part.grid
    # A point on the upper border of the grid belongs to the last voxel.
    x, y, z = (
        p - 1e-9 * h if p == top else p
        for p, h, top in zip(point, grid.spacing, grid.upper, strict=True)
    )
    cell = grid.index_of((x, y, z))
    value = np.nan
    if cell is not None and part.solid[cell]:
        t = [
            (p - o) / h - c
            for p, o, h, c in zip(point, grid.origin, grid.spacing, cell, strict=True)
        ]
        box = nodes[cell[0] : cell[0] + 2, cell[1] : cell[1] + 2, cell[2] : cell[2] + 2]
        weights = [np.array([1 - s, s]) for s in t]
        value = float(np.einsum("ijk,i,j,k->", box.astype(np.float64), *weights))
    if not np.isfinite(value):
        raise InputError(f"There is no temperature at {point} mm; choose a point in the part.")
    return value


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class HeatResult:
    """A temperature field with its heat balance.

    Attributes
    ----------
    part : Part
    heat_case : HeatCase
    temperature : ndarray of float64, shape (nx+1, ny+1, nz+1)
        At the nodes, degC; nan where no material touches, or a piece was left out (a caution
        says so).
    flux : ndarray of float32, shape (nx, ny, nz, 3)
        Heat flux at voxel centres, in the material (not thinned by the occupancy), mW/mm^2.
    flows : mapping
        Number, kind and region of everything that acts to the heat that it brings, mW; negative
        where it takes heat away. After a transient: means over the last step.
    stored : float
        Heat that the part takes up, mW; 0 when steady.
    balance : float
        Size of inflow minus stored heat over the largest flow: the check on all of them.
    lowest, highest : Extreme
        degC and mm.
    iterations : int
        Of the linear solver (of all steps).
    residual : float
        Of the last solve, relative to what drives it.
    cautions : tuple of str
    provenance : Provenance
    """

    part: Part
    heat_case: HeatCase
    temperature: Double
    flux: NDArray[np.float32]
    flows: Mapping[str, float]
    stored: float
    balance: float
    lowest: Extreme
    highest: Extreme
    iterations: int
    residual: float
    cautions: tuple[str, ...] = ()
    provenance: Provenance = field(default_factory=Provenance)

    def at_voxels(self, empty_degC: float | None = None) -> Double:
        """Temperature at voxel centres ``[i, j, k]``, degC: the mean of the 8 corners.

        Parameters
        ----------
        empty_degC : float, optional
            What voxels without a temperature get; the case's initial temperature by default, so
            that a thermal strain counted from there is 0 in empty space.
        """
        fill = self.heat_case.initial_degC if empty_degC is None else empty_degC
        mean = corner_mean(self.temperature)
        known = self.part.solid & np.isfinite(mean)
        return np.asarray(np.where(known, mean, fill), order="F")

    def temperature_at(self, point: tuple[float, float, float]) -> float:
        """Temperature at a point (mm) by trilinear interpolation in its voxel, degC.

        Raises
        ------
        InputError
            Where there is no material, or none that has a temperature.
        """
        return interpolate(self.part, self.temperature, point)

    def over(self, region: Region, reduce: str = "mean") -> float:
        """Temperature over the nodes of a region: mean, max or min, degC."""
        values = self.temperature[region.nodes(self.part)]
        values = values[np.isfinite(values)]
        if not len(values):
            raise InputError(f"Region '{region.name}' holds no node that has a temperature.")
        if reduce not in ("mean", "max", "min"):
            raise InputError(f"reduce is one of mean, max, min; got {reduce!r}.")
        return float(getattr(values, reduce)())


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TransientHeatResult:
    """Temperature over time.

    Attributes
    ----------
    part : Part
    heat_case : HeatCase
    final : HeatResult
        The last finished step, in full; pass it as ``start`` to go on from there.
    saved_s : ndarray of float64, shape (m,)
        Times of the saved fields, s; the first is 0, the last that of `final`.
    saved : ndarray of float32, shape (m, nx+1, ny+1, nz+1)
        degC; nan where no material touches.
    time_s : ndarray of float64, shape (n+1,)
        The start and each finished step.
    lowest_degC, highest_degC : ndarray of float64, shape (n+1,)
        Over the part.
    watched_degC : ndarray of float64, shape (n+1, points)
        At the watched points.
    flows : mapping
        As in `HeatResult`, a mean of each step, mW, shape (n,).
    stored : ndarray of float64, shape (n,)
        Heat that the part takes up, a mean of each step, mW.
    balance : float
        The worst of all steps.
    scheme, capacity : str
    step_s : float
    complete : bool
        False where the user stopped it; what was finished is here.
    cautions : tuple of str
    """

    part: Part
    heat_case: HeatCase
    final: HeatResult
    saved_s: Double
    saved: NDArray[np.float32]
    time_s: Double
    lowest_degC: Double
    highest_degC: Double
    watched_degC: Double
    flows: Mapping[str, Double]
    stored: Double
    balance: float
    scheme: str
    capacity: str
    step_s: float
    complete: bool
    cautions: tuple[str, ...] = ()

    def temperature_at(self, point: tuple[float, float, float]) -> Double:
        """Temperature at a point (mm) at the saved times, degC, shape (m,)."""
        return np.array([interpolate(self.part, field, point) for field in self.saved])

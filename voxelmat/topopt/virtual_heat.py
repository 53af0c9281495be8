"""A virtual temperature that tells whether every place has a way out to a cold one.

-div(k grad T) = s with k = 1e-3 + (1 - 1e-3) s^3 and T = 0 at cold nodes, for a share s of every
voxel: places of high share make heat and conduct it, others insulate. A place that leads to a
cold one along high shares stays cool, one that does not gets hot. What is read off is the p-norm
of s T over the voxels. The idea: S. Liu, Q. Li, W. Chen, L. Tong & G. Cheng, Front. Mech. Eng. 10
(2015) 126 (from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.fea.heat_system import HeatSystem
from voxelmat.fea.scalar_element import Spacing, modal_factors
from voxelmat.fea.scalar_forms import scalar_forms
from voxelmat.model.heatresult import corner_mean
from voxelmat.model.part import Part
from voxelmat.monitor import SILENT, Monitor
from voxelmat.topopt.physics import Physics
from voxelmat.topopt.smooth import smooth_maximum

__all__ = ["VirtualHeat", "filled"]

Array = NDArray[np.float64]
Bools = NDArray[np.bool_]

# What voxels of share 0 conduct, and how fast conduction rises with the share.
_LEAST, _POWER = 1e-3, 3.0
# Closeness of the one solve of a reference.
_CLOSE = 1e-10


def filled(part: Part) -> Array:
    """Filled fraction of the shape's voxels, designed or not, (nz, ny, nx)."""
    return np.ascontiguousarray(np.where(part.solid.T, part.fill.T, 0.0), dtype=np.float64)


def _to_corners(voxels: Array) -> Array:
    """Transpose of the mean over corners."""
    out = np.zeros(tuple(n + 1 for n in voxels.shape))
    nz, ny, nx = voxels.shape
    for a in range(8):
        z, y, x = a >> 2, a >> 1 & 1, a & 1
        out[z : z + nz, y : y + ny, x : x + nx] += voxels / 8.0
    return out


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class VirtualHeat:
    """p-norm of share times virtual temperature, mm^2.

    Attributes
    ----------
    fill : ndarray of float64, shape (nz, ny, nx)
        Filled fraction of the shape's voxels; heat and conduction are in proportion.
    cold : ndarray of bool, shape (nz+1, ny+1, nx+1)
    exponent : float
    key : str
        Under which solutions are remembered.
    """

    fill: Array
    cold: Bools
    exponent: float
    key: str

    def reference(self, share: Array, spacing: Spacing) -> float:
        """The norm of one share (nz, ny, nx), solved closely."""
        T, _ = self._system(share, spacing, SILENT).solve(self._heat(share, spacing), tol=_CLOSE)
        return smooth_maximum(share * np.maximum(corner_mean(T), 0.0), self.exponent)[0]

    def norm(self, share: Array, physics: Physics) -> tuple[float, Array]:
        """The norm, and its slope by the share of every voxel."""
        spacing = physics.spacing
        system = self._system(share, spacing, physics.monitor)
        T = self._solve(system, self._heat(share, spacing), self.key, physics)
        mean = corner_mean(T)
        norm, slope = smooth_maximum(share * np.maximum(mean, 0.0), self.exponent)
        a = self._solve(system, _to_corners(slope * share), f"{self.key} adjoint", physics)
        by_k = -scalar_forms(T, a, modal_factors(spacing, "lumped")[0])
        k_slope = self.fill * (1.0 - _LEAST) * _POWER * share ** (_POWER - 1.0)
        volume = self.fill * float(np.prod(spacing))
        return norm, slope * mean + volume * corner_mean(a) + k_slope * by_k

    def _solve(self, system: HeatSystem, load: Array, name: str, physics: Physics) -> Array:
        found, run = system.solve(load, x0=physics.recall(name), tol=physics.tolerance)
        physics.cg_iterations += run.iterations
        physics.remember(name, found)
        return found

    def _system(self, share: Array, spacing: Spacing, monitor: Monitor) -> HeatSystem:
        k = self.fill * (_LEAST + (1.0 - _LEAST) * share**_POWER)
        return HeatSystem(k, spacing, self.cold, monitor=monitor)

    def _heat(self, share: Array, spacing: Spacing) -> Array:
        return _to_corners(float(np.prod(spacing)) * self.fill * share)

"""Thermal and initial strain of voxels with nine constants, as nodal forces and energy.

As `voxelmat.fea.free_strain`: what is constant in a voxel acts on the element's constant modes; a
temperature that varies linearly in a voxel acts on its linear modes, with the moduli that they see.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from voxelmat.fea.element import Spacing
from voxelmat.fea.free_strain import FreeStrain
from voxelmat.fea.orthotropic_element import modal_table
from voxelmat.fea.orthotropic_operator import orthotropic_stress
from voxelmat.fea.sensitivity import strain, strain_adjoint

__all__ = ["OrthotropicFreeStrain"]

Double = NDArray[np.float64]

# Column of the nine constants that couples two normal strains.
_NORMAL = ((0, 3, 4), (3, 1, 5), (4, 5, 2))


class OrthotropicFreeStrain:
    """What each voxel would do if it were free.

    Parameters
    ----------
    free : FreeStrain
    labels : ndarray of uint16, shape (nz, ny, nx)
    constants : ndarray, shape (n, 9)
        As for `OrthotropicStiffness`.
    share : ndarray, shape (nz, ny, nx)
        Filled fraction that the stiffness is multiplied by.
    spacing : tuple of float
        mm.
    element : str
    """

    def __init__(
        self,
        free: FreeStrain,
        labels: NDArray[np.uint16],
        constants: Double,
        share: Double,
        spacing: Spacing,
        element: str,
    ) -> None:
        self.mean = free.mean * (labels > 0)
        self._slope = None if free.slope is None else free.slope * (labels > 0)
        self._labels, self._share, self._spacing = labels, share, spacing
        self._volume = float(np.prod(spacing))
        self._stress = share * orthotropic_stress(self.mean, labels, constants)
        self._moduli, self._own = self._seen(constants, element)

    @staticmethod
    def _seen(constants: Double, element: str) -> tuple[Double, Double]:
        """Stress a unit slope along v on component a, (3 v, 3 a, n); twice its energy, (3, n)."""
        table = modal_table(constants, element)
        out = np.zeros((3, 3, len(constants)))
        for v in range(3):
            a, b = (d for d in range(3) if d != v)
            for c, row in ((a, 9), (b, 10)):
                out[v, c] = table[row + 3 * v] + table[11 + 3 * v]
            if element == "full":
                # The element cannot change its thickness with the slope: that strain is resisted.
                for c in (a, b):
                    out[v, c] += constants[:, _NORMAL[c][v]]
                out[v, v] = sum(constants[:, _NORMAL[v][c]] for c in range(3))
        return out, out.sum(axis=1)

    def _slope_forces(self) -> Iterator[tuple[int, tuple[slice, slice, slice], Double]]:
        """Component, place of the corner's nodes, and force of each voxel by its linear modes."""
        if self._slope is None:
            return
        shape = self._labels.shape
        size = self._share * self._slope
        for corner in range(8):
            bit = [corner >> d & 1 for d in range(3)]
            sign = [2.0 * b - 1.0 for b in bit]
            at = (
                slice(bit[2], bit[2] + shape[0]),
                slice(bit[1], bit[1] + shape[1]),
                slice(bit[0], bit[0] + shape[2]),
            )
            for a in range(3):
                force = np.zeros(shape)
                for v in (d for d in range(3) if d != a):
                    force += sign[v] * size[v] * self._moduli[v, a][self._labels]
                yield a, at, (self._volume * sign[a] / (12.0 * self._spacing[a])) * force

    def forces(self) -> Double:
        """Nodal forces that would give the free strain, (3, nz+1, ny+1, nx+1), N."""
        out = strain_adjoint(self._volume * self._stress, self._spacing)
        for a, at, force in self._slope_forces():
            out[(a, *at)] += force
        return out

    def energy(self, u: Double) -> Double:
        """What to add to u . K u / 2 of each voxel for its strain energy, mJ, (nz, ny, nx)."""
        e = strain(u, self._spacing)
        out = self._volume * np.einsum("ckji,ckji->kji", self._stress, 0.5 * self.mean - e)
        if self._slope is not None:
            for v in range(3):
                own = self._share * self._own[v][self._labels] * self._slope[v] ** 2
                out += self._volume / 6.0 * own
            for a, at, force in self._slope_forces():
                out -= force * u[(a, *at)]
        return np.asarray(out)

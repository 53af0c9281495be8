"""Mass of a part on its nodes: lumped as a diagonal, or consistent as a product."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.element import Spacing
from voxelmat.fea.scalar_element import modal_factors
from voxelmat.kernels.scalar import apply_scalar
from voxelmat.kernels.threads import threads
from voxelmat.model.part import Part

__all__ = ["MASSES", "Mass", "densities"]

Double = NDArray[np.float64]

#: ``consistent``: the integral of products of shape functions; frequencies come out high.
#: ``lumped``: a node carries the eighths of voxels round it; frequencies come out lower.
MASSES = ("consistent", "lumped")


def densities(part: Part) -> Double:
    """Mass by volume of each voxel ``[nz, ny, nx]``, tonne/mm^3: density times filled fraction.

    0 in voxels that hold too little material to be solved.
    """
    density = part.palette_density()[part.labels.T]
    return np.ascontiguousarray(density * part.fill.T)


class Mass:
    """Mass matrix of one grid of voxels; it acts on each direction alone.

    Parameters
    ----------
    density : ndarray of float64, shape (nz, ny, nx)
        tonne/mm^3, 0 in empty voxels.
    spacing : tuple of float
        Voxel edge along x, y, z, mm.
    kind : str
        One of `MASSES`.
    """

    def __init__(self, density: Double, spacing: Spacing, kind: str) -> None:
        if kind not in MASSES:
            raise InputError(f"mass is one of {', '.join(MASSES)}; got {kind!r}.")
        self.kind = kind
        self._density = np.ascontiguousarray(density, dtype=np.float64)
        self._factors = modal_factors(spacing, "consistent")[1]
        self._nodal = _nodal(self._density, float(np.prod(spacing)))

    @property
    def total(self) -> float:
        """Mass of all voxels, tonne."""
        return float(self._nodal.sum())

    @property
    def nodal(self) -> Double:
        """Lumped mass ``[nz+1, ny+1, nx+1]``, tonne."""
        return self._nodal

    def apply(self, u: Double, y: Double) -> None:
        """Write M u to y, both ``[3, nz+1, ny+1, nx+1]`` and C-contiguous."""
        if self.kind == "lumped":
            np.multiply(self._nodal, u, out=y)
            return
        none = np.zeros(8)
        chunks = threads()
        for d in range(3):
            apply_scalar(u[d], self._density, self._density, y[d], none, self._factors, chunks)


def _nodal(density: Double, volume: float) -> Double:
    out = np.zeros(tuple(n + 1 for n in density.shape))
    eighth = density * (volume / 8.0)
    nz, ny, nx = density.shape
    for a in range(8):
        z, y, x = a >> 2, a >> 1 & 1, a & 1
        out[z : z + nz, y : y + ny, x : x + nx] += eighth
    return out

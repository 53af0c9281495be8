"""What one linear static solve found: displacement, reactions, and how sure it is."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.loadcase import LoadCase
from voxelmat.model.part import Part
from voxelmat.model.plate import PlateMotion
from voxelmat.model.region import Region
from voxelmat.provenance import Provenance

__all__ = ["ROTATION_LIMIT", "STRAIN_LIMIT", "Extreme", "StaticResult"]

#: Above these a small-displacement, linear answer is not used for a verdict. Both limits are
#: ours: common practice calls a few per cent of strain and some degrees of rotation "small".
STRAIN_LIMIT = 0.10
ROTATION_LIMIT = 0.17


@dataclass(frozen=True, slots=True, kw_only=True)
class Extreme:
    """A largest or smallest value and the place where it occurs, mm."""

    value: float
    place_mm: tuple[float, float, float]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StaticResult:
    """One load case solved.

    Attributes
    ----------
    part : Part
    load_case : LoadCase
    displacement : ndarray of float64, shape (nx+1, ny+1, nz+1, 3)
        At the nodes, mm; 0 where no material touches.
    strain : ndarray of float32, shape (nx, ny, nz, 6)
        At voxel centres: xx, yy, zz, xy, xz, yz, shear as engineering strain (gamma).
    stress : ndarray of float32, shape (nx, ny, nz, 6)
        At voxel centres, in the material (not thinned by the occupancy), MPa, same order.
    energy : float
        Strain energy, mJ (N mm).
    energy_density : ndarray of float32, shape (nx, ny, nz)
        mJ/mm^3.
    applied : tuple of float
        Sum of all applied forces, N.
    reactions : mapping
        Support number and region name to force on the part, N.
    balance : float
        Size of applied plus reactions over the size of what was applied: the check on both.
    reaction_moments : mapping
        Same keys as `reactions`: moment on the part, N mm; of a support about its `about`, of a
        plate about its reference point, of springs and foundations about the origin.
    moment_balance : float
        As `balance`, for moments about the middle of the grid.
    plates : mapping of str to PlateMotion
        How each plate moved and pushes.
    free_strain : ndarray of float32, shape (nx, ny, nz, 6), or None
        Thermal and initial strain, which `strain` includes and `stress` does not.
    resultants : mapping
        Load number and region name to its resultant force, N; a plate's force under its name.
    load_displacement : mapping
        Same keys: mean displacement along the load's resultant, weighted like the load, mm.
    largest_strain, largest_rotation : Extreme
        Largest principal strain (absolute) and largest local rotation, radians.
    iterations, residual, history
        Of the linear solver; the residual is relative to the load.
    element : str
    cautions : tuple of str
    provenance : Provenance
    """

    part: Part
    load_case: LoadCase
    displacement: NDArray[np.float64]
    strain: NDArray[np.float32]
    stress: NDArray[np.float32]
    energy: float
    energy_density: NDArray[np.float32]
    applied: tuple[float, float, float]
    reactions: Mapping[str, tuple[float, float, float]]
    balance: float
    resultants: Mapping[str, tuple[float, float, float]]
    load_displacement: Mapping[str, float]
    largest_strain: Extreme
    largest_rotation: Extreme
    iterations: int
    residual: float
    history: tuple[float, ...] = ()
    element: str = "icmb"
    cautions: tuple[str, ...] = ()
    reaction_moments: Mapping[str, tuple[float, float, float]] = field(default_factory=dict)
    moment_balance: float = 0.0
    plates: Mapping[str, PlateMotion] = field(default_factory=dict)
    free_strain: NDArray[np.float32] | None = None
    provenance: Provenance = field(default_factory=Provenance)

    # ------------------------------------------------------------------ reading it out
    @property
    def size(self) -> NDArray[np.float64]:
        """Size of the displacement at each node, mm."""
        return np.asarray(np.sqrt((self.displacement**2).sum(axis=-1)))

    @property
    def von_mises(self) -> NDArray[np.float64]:
        """Von Mises stress at voxel centres, MPa."""
        s = self.stress.astype(np.float64)
        xx, yy, zz, xy, xz, yz = (s[..., c] for c in range(6))
        axial = (xx - yy) ** 2 + (yy - zz) ** 2 + (zz - xx) ** 2
        return np.asarray(np.sqrt(0.5 * axial + 3.0 * (xy**2 + xz**2 + yz**2)))

    def displacement_at(self, point: tuple[float, float, float]) -> tuple[float, float, float]:
        """Displacement at a point (mm) by trilinear interpolation in its voxel, mm.

        Raises
        ------
        InputError
            Where the point lies outside the grid or in an empty voxel.
        """
        grid = self.part.grid
        cell = grid.index_of(point)
        if cell is None or not self.part.solid[cell]:
            raise InputError(f"There is no material at {point} mm; choose a point in the part.")
        out = np.zeros(3)
        local = [
            (p - o) / h - c
            for p, o, h, c in zip(point, grid.origin, grid.spacing, cell, strict=True)
        ]
        for corner in range(8):
            bit = [corner >> a & 1 for a in range(3)]
            weight = np.prod([t if b else 1 - t for t, b in zip(local, bit, strict=True)])
            out += weight * self.displacement[cell[0] + bit[0], cell[1] + bit[1], cell[2] + bit[2]]
        return float(out[0]), float(out[1]), float(out[2])

    def over(self, region: Region, component: str = "size", reduce: str = "max") -> float:
        """Displacement over the nodes of a region: mean, max or min of a component, mm."""
        nodes = region.nodes(self.part)
        if not nodes.any():
            raise InputError(f"Region '{region.name}' holds no node of the part.")
        if component == "size":
            values = self.size[nodes]
        else:
            values = self.displacement[nodes][:, "xyz".index(component)]
        if reduce == "mean":
            return float(values.mean())
        return float(values.max() if reduce == "max" else values.min())

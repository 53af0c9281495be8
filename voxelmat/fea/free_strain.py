"""Thermal and initial strain as consistent nodal forces of the box element.

A strain e0 that is constant in a voxel asks for the stress s0 = C e0 there, and its forces are
those of s0 in the element's constant modes: exact for every formulation, since incompatible
modes have no mean. A temperature given at nodes also varies linearly within the voxel. The
element's linear modes take that part with the moduli that they see, so that a bent plate has its
true curvature with a single voxel through its thickness.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.element import DEFAULT, Spacing, coefficients
from voxelmat.fea.sensitivity import strain, strain_adjoint
from voxelmat.fea.stress import stress
from voxelmat.model.expansion import palette_expansion
from voxelmat.model.freestrain import InitialStrain, Temperature
from voxelmat.model.heatresult import corner_mean
from voxelmat.model.loadcase import LoadCase
from voxelmat.model.part import Part

__all__ = ["FreeStrain", "free_strain"]

Double = NDArray[np.float64]

# Elements whose bending modes are free to change thickness: there only two of the three normal
# strains of a linear temperature meet any resistance.
_CONDENSED = ("icm", "icmb")


@dataclass(frozen=True, slots=True, kw_only=True)
class FreeStrain:
    """What each voxel would do if it were free; arrays ``[k, j, i]``.

    Attributes
    ----------
    mean : ndarray of float64, shape (6, nz, ny, nx)
        At the centre: xx, yy, zz, xy, xz, yz, shear as engineering strain.
    slope : ndarray of float64, shape (3, nz, ny, nx), or None
        Half the change of the (equal) normal strains from face to face along x, y, z.
    """

    mean: Double
    slope: Double | None = None

    def _multiple(self, element: str) -> float:
        return 2.0 if element in _CONDENSED else 3.0

    def _slope_stress(self, lam: Double, mu: Double, element: str) -> Double | None:
        """Stress on either side of a linear mode by its free strain."""
        if self.slope is None:
            return None
        _, m, linear, _ = coefficients(lam, mu, element)
        return np.asarray((self._multiple(element) * linear + 2.0 * m) * self.slope)

    def _slope_forces(
        self, linear: Double, spacing: Spacing
    ) -> Iterator[tuple[int, tuple[slice, slice, slice], Double]]:
        """Component, place of the corner's nodes, and force of each voxel by its linear modes."""
        volume, shape = float(np.prod(spacing)), linear.shape[1:]
        for corner in range(8):
            bit = [corner >> d & 1 for d in range(3)]
            sign = [2.0 * b - 1.0 for b in bit]
            at = (
                slice(bit[2], bit[2] + shape[0]),
                slice(bit[1], bit[1] + shape[1]),
                slice(bit[0], bit[0] + shape[2]),
            )
            for a in range(3):
                b, c = (d for d in range(3) if d != a)
                # Strain of component a that changes sign along b, and along c.
                mixed = sign[b] * linear[b] + sign[c] * linear[c]
                yield a, at, (volume * sign[a] / (12.0 * spacing[a])) * mixed

    def forces(self, lam: Double, mu: Double, spacing: Spacing, element: str = DEFAULT) -> Double:
        """Nodal forces that would give the free strain, (3, nz+1, ny+1, nx+1), N."""
        out = strain_adjoint(float(np.prod(spacing)) * stress(self.mean, lam, mu), spacing)
        linear = self._slope_stress(lam, mu, element)
        if linear is not None:
            for a, at, force in self._slope_forces(linear, spacing):
                out[(a, *at)] += force
        return out

    def energy(
        self, u: Double, lam: Double, mu: Double, spacing: Spacing, element: str = DEFAULT
    ) -> Double:
        """What to add to u . K u / 2 of each voxel for its strain energy, mJ, (nz, ny, nx)."""
        volume = float(np.prod(spacing))
        s, e = stress(self.mean, lam, mu), strain(u, spacing)
        out = volume * np.einsum("ckji,ckji->kji", s, 0.5 * self.mean - e)
        linear = self._slope_stress(lam, mu, element)
        if linear is not None and self.slope is not None:
            # An isotropic strain in n directions stores n times s e / 2; a linear mode a third.
            share = volume * self._multiple(element) / 6.0
            out += share * np.einsum("ckji,ckji->kji", linear, self.slope)
            for a, at, force in self._slope_forces(linear, spacing):
                out -= force * u[(a, *at)]
        return np.asarray(out)


def _slopes(nodes: Double) -> Double:
    """Half the mean difference across each voxel along x, y, z, of a node field [k, j, i]."""
    out = []
    for axis in (2, 1, 0):
        values = nodes
        for other in range(3):
            low, high = [slice(None)] * 3, [slice(None)] * 3
            low[other], high[other] = slice(None, -1), slice(1, None)
            lo, hi = values[tuple(low)], values[tuple(high)]
            values = 0.5 * (hi - lo) if other == axis else 0.5 * (hi + lo)
        out.append(values)
    return np.stack(out)


def _known(part: Part, field: Double, inside: NDArray[np.bool_], name: str) -> Double:
    """The field at voxel centres with 0 outside; refuses nan where there is material."""
    bad = inside & ~np.isfinite(field)
    if bad.any():
        i, j, k = (int(n) for n in np.argwhere(bad)[0])
        raise InputError(
            f"{name}: {int(bad.sum())} voxels of the part have no temperature, the first at voxel "
            f"({i}, {j}, {k}). Give a temperature wherever there is material."
        )
    return np.where(inside, field, 0.0)


def _expansion(part: Part, name: str) -> Double:
    """Coefficient of each palette entry, 1/K; refuses resins that state none."""
    found = palette_expansion(part)
    if found is None:
        used = np.unique(part.labels[part.solid])
        needed = part.palette_fractions()[used].max(axis=0) > 0
        lacking = [
            m.name
            for m, n in zip(part.resins, needed.tolist(), strict=True)
            if n and m.expansion is None
        ]
        raise InputError(
            f"{name[0].upper()}{name[1:]}: there is no thermal expansion for "
            f"{', '.join(repr(n) for n in lacking)}. State expansion_um_per_m_K in the material's "
            f"file, or give the material an `expansion`."
        )
    return found[0]


def _temperature(
    part: Part, load: Temperature, inside: NDArray[np.bool_], name: str
) -> tuple[Double, Double | None]:
    """Thermal strain at centres and its slope, arrays [k, j, i]."""
    alpha = _expansion(part, name)[part.labels]
    given = np.asarray(load.temperature)
    if given.ndim == 0 or given.shape == part.grid.shape:
        rise = np.broadcast_to(given, part.grid.shape) - load.stress_free
        return (alpha * _known(part, rise, inside, name)).T, None
    if given.shape != part.grid.node_shape:
        raise InputError(
            f"{name}: the temperature field has shape {given.shape}; the part has "
            f"{part.grid.shape} voxels and {part.grid.node_shape} nodes."
        )
    rise = _known(part, corner_mean(given) - load.stress_free, inside, name)
    slope = np.where(inside.T, _slopes(given.T), 0.0)
    return (alpha * rise).T, alpha.T * slope


def free_strain(part: Part, case: LoadCase, names: list[str]) -> FreeStrain | None:
    """All thermal and initial strains of a load case together; None where it has none.

    Parameters
    ----------
    part : Part
    case : LoadCase
    names : list of str
        What each load is called in messages.

    Raises
    ------
    InputError
        A resin without expansion, a field of the wrong shape, a region without material.
    """
    if not case.strains:
        return None
    shape = part.grid.shape[::-1]
    mean = np.zeros((6, *shape))
    slope: Double | None = None
    for load, name in zip(case.loads, names, strict=True):
        if not isinstance(load, Temperature | InitialStrain):
            continue
        inside = part.solid if load.region is None else load.region.voxels(part)
        if not inside.any():
            where = "the part" if load.region is None else f"region '{load.region.name}'"
            raise InputError(f"{name[0].upper()}{name[1:]}: {where} holds no material.")
        if isinstance(load, Temperature):
            strain, change = _temperature(part, load, inside, name)
            mean[:3] += strain
            if change is not None:
                slope = change if slope is None else slope + change
            continue
        if load.strain.ndim == 4 and load.strain.shape[:3] != part.grid.shape:
            raise InputError(
                f"{name}: the strain field has shape {load.strain.shape}; the part has "
                f"{part.grid.shape} voxels."
            )
        mean += np.where(inside[..., None], load.strain, 0.0).T
    return FreeStrain(mean=np.ascontiguousarray(mean), slope=slope)

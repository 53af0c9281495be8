"""Largest use of the strength of interfaces, in designs whose resins blend.

Between two neighbouring designed voxels with fractions w and w' the share of the volume that
changes from resin m to resin n (or back) is s_mn = sqrt(max(0, -(w'_m - w_m) (w'_n - w_n))): 1
between two pure resins, |w' - w| for blends of two, 0 between equal blends. A face uses
U_mn = r r' s_mn sqrt((t_n+ / T)^2 + (t_s / S)^2) of the bond of m and n, where t_n+ and t_s are
the pull and the shear of the traction on the face and T and S the bond's strengths. So a sharp
interface is judged in full, and one that is graded over n voxels by 1/n of it, since there the
droplets of both resins interlock.

The traction is the mean of the stresses of the solid on both sides, (sigma + sigma') / 2 . n, with
n the face's own normal; r relaxes half-empty voxels as for stresses. On a plane interface in a
uniform state of stress this is exact. On slanted ones the steps of the voxels turn pull into
shear and back. Faces to kept voxels are not judged: check them in the finished part.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.fea.sensitivity import strain, strain_adjoint
from voxelmat.fea.stress import stress
from voxelmat.topopt.physics import Physics
from voxelmat.topopt.response_motion import add
from voxelmat.topopt.response_strength import relaxation
from voxelmat.topopt.responses import Slopes
from voxelmat.topopt.smooth import correction, scaled, smooth_maximum

__all__ = ["InterfaceResponse"]

Array = NDArray[np.float64]
Side = tuple[slice, ...]

# Rows of the stress that make up the traction on faces whose normal is x, y, z.
_ROWS = ((0, 3, 4), (3, 1, 5), (4, 5, 2))
_NO_USE = 1e-24


def _sides(axis: int) -> tuple[Side, Side]:
    """Voxels below and above the faces across x, y or z (axis 0, 1, 2) of arrays (nz, ny, nx)."""
    low, high = [slice(None)] * 3, [slice(None)] * 3
    low[2 - axis], high[2 - axis] = slice(None, -1), slice(1, None)
    return tuple(low), tuple(high)


@dataclass(frozen=True, slots=True, kw_only=True)
class _Solid:
    """Presence and moduli of the solid of every voxel of the domain, spread on the grid."""

    r: Array
    lam: Array
    mu: Array
    w: Array


@dataclass(frozen=True, slots=True, kw_only=True)
class InterfaceResponse:
    """Smooth maximum of U over faces, pairs of resins and load cases.

    Attributes
    ----------
    cases : tuple of int
    tensile, shear : ndarray, (K, K)
        Strengths of the bonds, MPa; only the entries above the diagonal are read.
    domain, judged : ndarray of bool, (nz, ny, nx)
    exponent : float
    key, name, unit : str
    """

    cases: tuple[int, ...]
    tensile: Array
    shear: Array
    domain: NDArray[np.bool_]
    judged: NDArray[np.bool_]
    exponent: float
    key: str
    name: str = "largest use of an interface's strength"
    unit: str = "of the strength"

    def value(self, physics: Physics) -> tuple[float, Slopes]:
        """By strains (an adjoint a load case), densities and fractions."""
        solid = self._solid(physics)
        parts = self._parts(physics, solid)
        use = np.concatenate([u.ravel() for _, _, u in parts])
        worst, g = smooth_maximum(use, self.exponent)
        back = _Back(solid, self.domain.shape)
        loads = {n: np.zeros((6, *self.domain.shape)) for n in self.cases}
        start = 0
        sigma = {n: self._stress(physics, solid, n) for n in self.cases}
        for n, axis, u in parts:
            by_use = g[start : start + u.size].reshape(u.shape)
            start += u.size
            loads[n] += self._face_back(back, sigma[n], axis, by_use)
        slopes: Slopes = {}
        for n in self.cases:
            self._case_back(physics, solid, back, n, loads[n], slopes)
        add(slopes, self._collect(physics, back))
        ratio = correction(physics, self.key, worst, float(use.max(initial=0.0)))
        return scaled(ratio, worst, slopes)

    def truth(self, physics: Physics) -> float:
        """The largest."""
        parts = self._parts(physics, self._solid(physics))
        return max((float(u.max(initial=0.0)) for _, _, u in parts), default=0.0)

    def report(self, value: float) -> float:
        """As it is."""
        return value

    # ------------------------------------------------------------------ forward
    def _solid(self, physics: Physics) -> _Solid:
        f, inside = physics.fields, self.domain
        r, lam, mu = (np.zeros(inside.shape) for _ in range(3))
        r[inside] = relaxation(f.rho[inside])[0]
        r[~self.judged] = 0.0
        lam[inside] = f.blend.bulk - 2.0 / 3.0 * f.blend.shear
        mu[inside] = f.blend.shear
        return _Solid(r=r, lam=lam, mu=mu, w=f.w)

    def _stress(self, physics: Physics, solid: _Solid, case: int) -> Array:
        return stress(strain(physics.displacement(case), physics.spacing), solid.lam, solid.mu)

    def _parts(self, physics: Physics, solid: _Solid) -> list[tuple[int, int, Array]]:
        """For each load case and axis: U of (pairs, faces)."""
        found = []
        for n in self.cases:
            sigma = self._stress(physics, solid, n)
            for axis in range(3):
                share, use = self._face(solid, sigma, axis)[:2]
                low, high = _sides(axis)
                found.append((n, axis, solid.r[low] * solid.r[high] * share * use))
        return found

    def _pairs(self) -> list[tuple[int, int]]:
        return list(itertools.combinations(range(len(self.tensile)), 2))

    def _face(
        self, solid: _Solid, sigma: Array, axis: int
    ) -> tuple[Array, Array, Array, Array, Array]:
        """Shares and uses of (pairs, faces); pull; shears (3, faces), 0 along the normal; steps."""
        low, high = _sides(axis)
        t = np.stack([0.5 * (sigma[row][low] + sigma[row][high]) for row in _ROWS[axis]])
        pull = np.maximum(t[axis], 0.0)
        slide = t.copy()
        slide[axis] = 0.0
        size = (slide**2).sum(0)
        step = solid.w[(slice(None), *high)] - solid.w[(slice(None), *low)]
        share = [np.sqrt(np.maximum(-step[m] * step[n], 0.0)) for m, n in self._pairs()]
        use = [
            np.sqrt((pull / self.tensile[m, n]) ** 2 + size / self.shear[m, n] ** 2 + _NO_USE)
            for m, n in self._pairs()
        ]
        return np.array(share), np.array(use), pull, slide, step

    # ------------------------------------------------------------------ back
    def _face_back(self, back: _Back, sigma: Array, axis: int, by_use: Array) -> Array:
        """Slopes by r and w into `back`; by the stress as the result, (6, nz, ny, nx)."""
        low, high = _sides(axis)
        share, use, pull, slide, step = self._face(back.solid, sigma, axis)
        ra, rb = back.solid.r[low], back.solid.r[high]
        both = (by_use * share * use).sum(0)
        back.r[low] += both * rb
        back.r[high] += both * ra
        by_t = np.zeros((3, *ra.shape))
        for p, (m, n) in enumerate(self._pairs()):
            g = by_use[p] * ra * rb
            # The p-norm's slope vanishes faster than 1 / share grows.
            over = np.divide(0.5, share[p], out=np.zeros_like(ra), where=share[p] > 0)
            by_product = -g * use[p] * over
            for a, b in ((m, n), (n, m)):
                back.w[a][high] += by_product * step[b]
                back.w[a][low] -= by_product * step[b]
            per = g * share[p] / use[p]
            by_t[axis] += per * pull / self.tensile[m, n] ** 2
            by_t += per * slide / self.shear[m, n] ** 2
        out = np.zeros((6, *back.r.shape))
        for c, row in enumerate(_ROWS[axis]):
            out[row][low] += 0.5 * by_t[c]
            out[row][high] += 0.5 * by_t[c]
        return out

    def _case_back(
        self, physics: Physics, solid: _Solid, back: _Back, case: int, by_stress: Array,
        slopes: Slopes,
    ) -> None:  # fmt: skip
        """From slopes by the stress to those by moduli of the solid and by the stiffness."""
        u = physics.displacement(case)
        e = strain(u, physics.spacing)
        pressure = by_stress[0] + by_stress[1] + by_stress[2]
        back.lam += pressure * (e[0] + e[1] + e[2])
        back.mu += 2.0 * (by_stress[:3] * e[:3]).sum(0) + (by_stress[3:] * e[3:]).sum(0)
        load = strain_adjoint(stress(by_stress, solid.lam, solid.mu), physics.spacing)
        adjoint = physics.adjoint(case, load, self.key)
        add(slopes, {k: -form for k, form in physics.by_stiffness(u, adjoint).items()})

    def _collect(self, physics: Physics, back: _Back) -> Slopes:
        """Slopes by the density and the fractions."""
        f, inside = physics.fields, self.domain
        rho = np.zeros(inside.shape)
        rho[inside] = (back.r * self.judged)[inside] * relaxation(f.rho[inside])[1]
        by_bulk = back.lam[inside]
        by_shear = back.mu[inside] - 2.0 / 3.0 * by_bulk
        w = back.w
        w[:, inside] += (by_bulk[:, None] * f.blend.d_bulk).T
        w[:, inside] += (by_shear[:, None] * f.blend.d_shear).T
        return {"rho": rho, "w": w}


class _Back:
    """Slopes as they gather, by the fields of `_Solid`."""

    def __init__(self, solid: _Solid, shape: tuple[int, ...]) -> None:
        self.solid = solid
        self.r, self.lam, self.mu = (np.zeros(shape) for _ in range(3))
        self.w = np.zeros_like(solid.w)

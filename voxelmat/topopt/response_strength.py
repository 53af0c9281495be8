"""Largest use of each resin's own strength or elongation, for blends and half-empty voxels too.

U = r(rho) s(w) eps_eq with the equivalent strain eps_eq = sqrt(2/3 e : e) of the deviator at voxel
centres. Stress: s = 3 G(w) sum_m w_m / S_m, since the von Mises stress is 3 G eps_eq; the strength
of a blend is then the harmonic mean of its resins', nearer to the weaker. Stretch: s = sum_m w_m /
e_m with elongations e_m. For pure resins both are exact.

r = rho sqrt((1 + d) / (rho + d)), d = 1e-3, is the root of the density with a finite slope at 0. G
is that of the solid: the stress which the solid part of a half-empty voxel would have, relaxed so
that it vanishes with the voxel and material can be taken away.

In voxels that are kept as they are U only follows the strain; resins there without a record are
not judged. Stresses at steps of a slanted surface are not reliable at any resolution.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from voxelmat.fea.sensitivity import strain, strain_adjoint
from voxelmat.topopt.physics import Physics
from voxelmat.topopt.response_motion import add
from voxelmat.topopt.responses import Slopes
from voxelmat.topopt.smooth import correction, scaled, smooth_maximum

__all__ = ["StrengthResponse", "equivalent_strain", "relaxation"]

Array = NDArray[np.float64]

_ROUND = 1e-3
_NO_STRAIN = 1e-24


def relaxation(rho: Array) -> tuple[Array, Array]:
    """r(rho) and its slope."""
    d = _ROUND
    r = rho * np.sqrt((1.0 + d) / (rho + d))
    return r, np.sqrt(1.0 + d) * (0.5 * rho + d) / (rho + d) ** 1.5


def equivalent_strain(e: Array) -> tuple[Array, Array]:
    """sqrt(2/3 e : e) of the deviator, (nz, ny, nx), and its slope by the strain, (6, ...)."""
    dev = e.copy()
    dev[:3] -= (e[0] + e[1] + e[2]) / 3.0
    eq = np.sqrt(2.0 / 3.0 * ((dev[:3] ** 2).sum(0) + 0.5 * (dev[3:] ** 2).sum(0)) + _NO_STRAIN)
    dev[3:] *= 0.5
    return eq, 2.0 / 3.0 * dev / eq


@dataclass(frozen=True, slots=True, kw_only=True)
class StrengthResponse:
    """Smooth maximum of U over voxels and load cases.

    Attributes
    ----------
    kind : str
        ``"stress"`` or ``"stretch"``.
    cases : tuple of int
    inverse : ndarray, (K,)
        1 / strength (1/MPa) or 1 / elongation of each resin; 0 where it is not judged.
    domain : ndarray of bool, (nz, ny, nx)
        Designed voxels.
    judged : ndarray of bool, (nz, ny, nx)
    kept : ndarray of float, (nz, ny, nx)
        s of kept voxels, 0 elsewhere.
    exponent : float
    key, name, unit : str
    """

    kind: Literal["stress", "stretch"]
    cases: tuple[int, ...]
    inverse: Array
    domain: NDArray[np.bool_]
    judged: NDArray[np.bool_]
    kept: Array
    exponent: float
    key: str
    name: str
    unit: str = "of the strength"

    def value(self, physics: Physics) -> tuple[float, Slopes]:
        """By strains (an adjoint a load case), densities and fractions."""
        rho, fractions = physics.fields.rho[self.domain], physics.fields.w
        s, by_w = self._sensitivity(physics)
        r, by_rho = self._presence(rho)
        parts = [equivalent_strain(self._strain(physics, n)) for n in self.cases]
        use = np.array([r * s * eq for eq, _ in parts])
        worst, g = smooth_maximum(use, self.exponent)
        slopes: Slopes = {"rho": np.zeros(r.shape), "w": np.zeros(fractions.shape)}
        inside = self.domain
        for n, (eq, by_strain), by_use in zip(self.cases, parts, g, strict=True):
            load = strain_adjoint(by_use * r * s * by_strain, physics.spacing)
            adjoint = physics.adjoint(n, load, self.key)
            forms = physics.by_stiffness(physics.displacement(n), adjoint)
            add(slopes, {k: -form for k, form in forms.items()})
            slopes["rho"][inside] += (by_use * s * eq)[inside] * by_rho
            slopes["w"][:, inside] += (by_use * r * eq)[inside] * by_w
        ratio = correction(physics, self.key, worst, float(use.max()))
        return scaled(ratio, worst, slopes)

    def truth(self, physics: Physics) -> float:
        """The largest."""
        r = self._presence(physics.fields.rho[self.domain])[0]
        s = self._sensitivity(physics)[0]
        found = (equivalent_strain(self._strain(physics, n))[0] for n in self.cases)
        return max(float((r * s * eq).max()) for eq in found)

    def report(self, value: float) -> float:
        """As it is."""
        return value

    def _strain(self, physics: Physics, case: int) -> Array:
        return strain(physics.displacement(case), physics.spacing)

    def _presence(self, rho: Array) -> tuple[Array, Array]:
        """The factor r in all judged voxels, 1 in kept ones, and its slope in designed ones."""
        r, slope = relaxation(rho)
        out = np.ones(self.domain.shape)
        out[self.domain] = r
        return np.where(self.judged, out, 0.0), slope * self.judged[self.domain]

    def _sensitivity(self, physics: Physics) -> tuple[Array, Array]:
        """The factor s everywhere, and its slopes by the fractions of designed voxels, (K, n)."""
        f, inside = physics.fields, self.domain
        per_strength = np.tensordot(self.inverse, f.w[:, inside], 1)
        by_w = np.repeat(self.inverse[:, None], per_strength.size, 1)
        if self.kind == "stress":
            by_w = 3.0 * (f.blend.shear * by_w + f.blend.d_shear.T * per_strength)
            per_strength = 3.0 * f.blend.shear * per_strength
        s = self.kept.copy()
        s[inside] = per_strength
        return s, by_w

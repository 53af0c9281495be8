"""Effective constants of a periodic cell: stiffness, engineering constants, anisotropy."""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError

__all__ = ["ORDER", "EffectiveConstants", "NearestCubic", "NearestIsotropic"]

Floats = NDArray[np.float64]

#: Order of strains and stresses; shear strains are engineering ones.
ORDER = ("xx", "yy", "zz", "xy", "xz", "yz")

# Least over largest eigenvalue of a stiffness that still counts as stiff in every direction.
_STIFF = 1e-10
# From engineering shear to the orthonormal basis (Kelvin), in which norms of tensors are right.
_KELVIN = np.array([1.0, 1.0, 1.0, np.sqrt(2.0), np.sqrt(2.0), np.sqrt(2.0)])


class NearestIsotropic(NamedTuple):
    """The isotropic stiffness nearest in the Frobenius norm; its moduli are Voigt's averages.

    `distance` is the norm of what is left over that of the stiffness (0 where it is isotropic).
    """

    bulk: float
    shear: float
    distance: float

    @property
    def young(self) -> float:
        """Young's modulus, MPa."""
        return 9.0 * self.bulk * self.shear / (3.0 * self.bulk + self.shear)

    @property
    def poisson(self) -> float:
        """Poisson's ratio."""
        return (3.0 * self.bulk - 2.0 * self.shear) / (2.0 * (3.0 * self.bulk + self.shear))


class NearestCubic(NamedTuple):
    """The cubic stiffness along x, y, z nearest in the Frobenius norm, MPa, and the distance."""

    C11: float
    C12: float
    C44: float
    distance: float

    @property
    def zener(self) -> float:
        """Zener's ratio 2 C44 / (C11 - C12); 1 where isotropic."""
        return 2.0 * self.C44 / (self.C11 - self.C12)

    @property
    def bulk(self) -> float:
        """Bulk modulus, MPa."""
        return (self.C11 + 2.0 * self.C12) / 3.0


def _norm(C: Floats) -> float:
    return float(np.linalg.norm(C * _KELVIN[:, None] * _KELVIN))


def _distance(C: Floats, near: Floats) -> float:
    size = _norm(C)
    return _norm(C - near) / size if size > 0 else 0.0


def _cubic(C11: float, C12: float, C44: float) -> Floats:
    out = np.diag([C11 - C12] * 3 + [C44] * 3)
    out[:3, :3] += C12
    return out


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class EffectiveConstants:
    """What a periodic cell is like from afar.

    Attributes
    ----------
    stiffness : ndarray, shape (6, 6)
        Stress (MPa) from strain, in the order `ORDER`; symmetric.
    expansion : ndarray, shape (6,), or None
        Strain a kelvin, 1/K, shear as engineering strain. None where a material's coefficient
        is not known or the cell is not stiff in every direction.
    density : float
        tonne/mm^3, of the cell with its empty space.
    fractions : mapping
        Volume fraction of each resin in the cell; what is missing to 1 is empty.
    symmetry_error : float
        Largest difference between mean stresses that ought to be equal, over the largest
        stiffness: how far the six solutions are from exact. The stiffness itself comes from
        energies, whose error is of the order of its square.
    iterations : tuple of int
        Of the six load cases.
    element : str
    shape : tuple of int
        Elements along x, y, z.
    fields : ndarray of float64, shape (6, 3, nz+1, ny+1, nx+1), or None
        The periodic part of the displacement in each load case (mm at unit strain), kept on
        request for a later warm start.
    cautions : tuple of str
    """

    stiffness: Floats
    expansion: Floats | None
    density: float
    fractions: Mapping[str, float]
    symmetry_error: float
    iterations: tuple[int, ...]
    element: str
    shape: tuple[int, int, int]
    fields: Floats | None = None
    cautions: tuple[str, ...] = field(default=())

    @property
    def is_stiff(self) -> bool:
        """Whether the cell resists every strain."""
        values = np.linalg.eigvalsh(self.stiffness * _KELVIN[:, None] * _KELVIN)
        return bool(values[0] > _STIFF * values[-1])

    @property
    def compliance(self) -> Floats:
        """Strain from stress, 1/MPa, shape (6, 6).

        Raises
        ------
        InputError
            Where the cell does not resist some strain; the message names it.
        """
        if not self.is_stiff:
            _, vectors = np.linalg.eigh(self.stiffness * _KELVIN[:, None] * _KELVIN)
            weak = ORDER[int(np.argmax(np.abs(vectors[:, 0])))]
            raise InputError(
                f"The cell has no stiffness against some strains (mainly {weak}), so it has no "
                f"compliance: its material does not reach through the cell in every direction."
            )
        return np.asarray(np.linalg.inv(self.stiffness))

    @property
    def young(self) -> Floats:
        """Young's moduli along x, y, z, MPa."""
        return np.asarray(1.0 / np.diag(self.compliance)[:3])

    @property
    def shear(self) -> Floats:
        """Shear moduli xy, xz, yz, MPa."""
        return np.asarray(1.0 / np.diag(self.compliance)[3:])

    @property
    def poisson(self) -> Floats:
        """Minus the strain along b over that along a, pulled along a: [a, b]; nan for a = b."""
        S = self.compliance[:3, :3]
        out = -S / np.diag(S)[:, None]
        np.fill_diagonal(out, np.nan)
        return np.asarray(out)

    @property
    def bulk_bounds(self) -> tuple[float, float]:
        """Reuss and Voigt average of the bulk modulus, MPa."""
        S, C = self.compliance[:3, :3], self.stiffness[:3, :3]
        return float(1.0 / S.sum()), float(C.sum() / 9.0)

    @property
    def shear_bounds(self) -> tuple[float, float]:
        """Reuss and Voigt average of the shear modulus, MPa."""
        S, C = self.compliance, self.stiffness
        off = S[:3, :3].sum() - np.trace(S[:3, :3])
        reuss = 15.0 / (4.0 * np.trace(S[:3, :3]) - 2.0 * off + 3.0 * np.trace(S[3:, 3:]))
        off = C[:3, :3].sum() - np.trace(C[:3, :3])
        voigt = (np.trace(C[:3, :3]) - 0.5 * off + 3.0 * np.trace(C[3:, 3:])) / 15.0
        return float(reuss), float(voigt)

    @property
    def universal_anisotropy(self) -> float:
        """5 G_V / G_R + K_V / K_R - 6; 0 where isotropic.

        S. I. Ranganathan & M. Ostoja-Starzewski, Phys. Rev. Lett. 101 (2008) 055504.
        """
        (k_r, k_v), (g_r, g_v) = self.bulk_bounds, self.shear_bounds
        return 5.0 * g_v / g_r + k_v / k_r - 6.0

    @property
    def isotropic(self) -> NearestIsotropic:
        """The nearest isotropic stiffness."""
        C = self.stiffness
        bulk = float(C[:3, :3].sum() / 9.0)
        off = C[:3, :3].sum() - np.trace(C[:3, :3])
        shear = float((np.trace(C[:3, :3]) - 0.5 * off + 3.0 * np.trace(C[3:, 3:])) / 15.0)
        near = _cubic(bulk + 4.0 / 3.0 * shear, bulk - 2.0 / 3.0 * shear, shear)
        return NearestIsotropic(bulk, shear, _distance(C, near))

    @property
    def cubic(self) -> NearestCubic:
        """The nearest cubic stiffness with its axes along x, y, z."""
        C = self.stiffness
        C11, C44 = float(np.trace(C[:3, :3]) / 3.0), float(np.trace(C[3:, 3:]) / 3.0)
        C12 = float((C[:3, :3].sum() - 3.0 * C11) / 6.0)
        return NearestCubic(C11, C12, C44, _distance(C, _cubic(C11, C12, C44)))

    def replace(self, **changes: Any) -> EffectiveConstants:
        """A copy with `changes`."""
        return dataclasses.replace(self, **changes)

    def __repr__(self) -> str:
        n, near = self.shape, self.isotropic
        return (
            f"EffectiveConstants({n[0]} x {n[1]} x {n[2]} elements {self.element}, nearest "
            f"isotropic K {near.bulk:.4g} MPa, G {near.shear:.4g} MPa, off by "
            f"{100 * near.distance:.2g} %)"
        )

    def _repr_html_(self) -> str:
        from voxelmat.model.html_effective import effective_table

        return effective_table(self)

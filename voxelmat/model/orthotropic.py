"""A stiffness with nine constants in the axes of the grid: printed layers, homogenised lattices."""

from __future__ import annotations

import dataclasses
import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.effective import EffectiveConstants
from voxelmat.model.material import INDICATIVE, Material

__all__ = ["Orthotropic", "layered"]

Triple = tuple[float, float, float]

_PAIRS = ((0, 1), (0, 2), (1, 2))
# Share of a stiffness that may lie outside the nine constants before it is refused.
_OFF_AXIS = 0.05


def _triple(values: object, what: str) -> Triple:
    try:
        out = tuple(float(v) for v in np.asarray(values, dtype=np.float64).ravel())
    except (TypeError, ValueError):
        out = ()
    if len(out) != 3 or not all(map(math.isfinite, out)):
        raise InputError(f"{what} is three finite numbers; got {values!r}.")
    return out[0], out[1], out[2]


@dataclass(frozen=True, slots=True, kw_only=True)
class Orthotropic:
    """Linear elastic with three planes of symmetry, along the axes of the grid.

    Attributes
    ----------
    E : tuple of float
        Young's moduli along x, y, z, MPa (> 0).
    nu_xy, nu_xz, nu_yz : float
        Minus the strain along the second axis over that along the first, pulled along the first.
        ``nu_yx = nu_xy E_y / E_x`` and so on.
    G : tuple of float
        Shear moduli xy, xz, yz, MPa (> 0).
    source : str
        Where the constants come from, or ``"indicative"``.
    off_axis : float
        Share of the stiffness that the constants were read from that they leave out (coupling of
        shear with the rest); 0 where they were given.

    Raises
    ------
    InputError
        Constants that no stable material can have; the message names the ratio and its limit.
    """

    E: Triple
    nu_xy: float
    nu_xz: float
    nu_yz: float
    G: Triple
    source: str = INDICATIVE
    off_axis: float = 0.0

    def __post_init__(self) -> None:
        object.__setattr__(self, "E", _triple(self.E, "E"))
        object.__setattr__(self, "G", _triple(self.G, "G"))
        if not (min(self.E) > 0 and min(self.G) > 0):
            raise InputError(
                f"Young's and shear moduli must be above 0 MPa; got E {self.E} and G {self.G}."
            )
        for (a, b), nu in zip(_PAIRS, self.poisson, strict=True):
            most = math.sqrt(self.E[a] / self.E[b])
            if not abs(nu) < most:
                raise InputError(
                    f"nu_{'xyz'[a]}{'xyz'[b]} is {nu:g}; with E_{'xyz'[a]} {self.E[a]:g} and "
                    f"E_{'xyz'[b]} {self.E[b]:g} MPa a stable material needs less than "
                    f"sqrt(E_{'xyz'[a]} / E_{'xyz'[b]}) = {most:.4g} in size. Was "
                    f"nu_{'xyz'[b]}{'xyz'[a]} meant? nu_{'xyz'[a]}{'xyz'[b]} is the strain along "
                    f"{'xyz'[b]} when pulled along {'xyz'[a]}."
                )
        # What is left of 1 - nu12 nu21 - nu23 nu32 - nu13 nu31 - 2 nu21 nu32 nu13, the
        # determinant of the compliance with a unit diagonal.
        xy, xz, yz = (
            nu * math.sqrt(self.E[b] / self.E[a])
            for (a, b), nu in zip(_PAIRS, self.poisson, strict=True)
        )
        room = 1.0 - xy**2 - xz**2 - yz**2 - 2.0 * xy * xz * yz
        if not room > 1e-9:
            raise InputError(
                f"Poisson's ratios nu_xy {self.nu_xy:g}, nu_xz {self.nu_xz:g}, nu_yz "
                f"{self.nu_yz:g} are too large together for E {self.E} MPa: the volume would grow "
                f"under pressure (1 - nu_xy nu_yx - nu_xz nu_zx - nu_yz nu_zy - 2 nu_xy nu_yz "
                f"nu_zx = {room:.3g} must be above 0). Lower the ratios."
            )

    @property
    def poisson(self) -> Triple:
        """nu_xy, nu_xz, nu_yz."""
        return self.nu_xy, self.nu_xz, self.nu_yz

    @property
    def indicative(self) -> bool:
        """True where no source stands behind the constants."""
        return self.source.strip().lower().startswith(INDICATIVE)

    @property
    def compliance(self) -> NDArray[np.float64]:
        """Strain from stress, 1/MPa, (6, 6), in the order xx, yy, zz, xy, xz, yz."""
        S = np.diag([1.0 / v for v in (*self.E, *self.G)])
        for (a, b), nu in zip(_PAIRS, self.poisson, strict=True):
            S[a, b] = S[b, a] = -nu / self.E[a]
        return S

    @property
    def stiffness(self) -> NDArray[np.float64]:
        """Stress from strain, MPa, (6, 6), in the order xx, yy, zz, xy, xz, yz."""
        C = np.diag([0.0, 0.0, 0.0, *self.G])
        C[:3, :3] = np.linalg.inv(self.compliance[:3, :3])
        return C

    @property
    def constants(self) -> NDArray[np.float64]:
        """C11 C22 C33 C12 C13 C23 C44 C55 C66, MPa; 4 is yz, 5 is xz, 6 is xy."""
        C = self.stiffness
        normal = (C[0, 0], C[1, 1], C[2, 2], C[0, 1], C[0, 2], C[1, 2])
        return np.array([*normal, self.G[2], self.G[1], self.G[0]])

    @classmethod
    def isotropic(cls, E: float, nu: float, *, source: str = INDICATIVE) -> Orthotropic:
        """The same in every direction."""
        G = E / (2.0 * (1.0 + nu))
        return cls(E=(E, E, E), nu_xy=nu, nu_xz=nu, nu_yz=nu, G=(G, G, G), source=source)

    @classmethod
    def from_stiffness(
        cls,
        stiffness: NDArray[np.float64],
        *,
        source: str = INDICATIVE,
        most_off_axis: float = _OFF_AXIS,
    ) -> Orthotropic:
        """The nine constants of a 6x6 stiffness (MPa; order xx, yy, zz, xy, xz, yz).

        Entries outside the nine are dropped; their share is kept in `off_axis`.

        Raises
        ------
        InputError
            A stiffness that is not symmetric or not positive definite, or whose share outside the
            nine constants is above `most_off_axis`.
        """
        C = np.asarray(stiffness, dtype=np.float64)
        if C.shape != (6, 6) or not np.all(np.isfinite(C)):
            raise InputError(f"A stiffness is 6x6 and finite; got shape {C.shape}.")
        size = float(np.linalg.norm(C))
        if float(np.linalg.norm(C - C.T)) > 1e-6 * size:
            raise InputError("The stiffness is not symmetric, so it is not elastic.")
        kept = np.diag(np.diag(C))
        kept[:3, :3] = 0.5 * (C[:3, :3] + C[:3, :3].T)
        off = float(np.linalg.norm(0.5 * (C + C.T) - kept)) / size if size > 0 else 0.0
        if off > most_off_axis:
            raise InputError(
                f"{100 * off:.3g} % of the stiffness couples shear with the rest, above "
                f"{100 * most_off_axis:.3g} %: it is not orthotropic along x, y, z. Turn the cell "
                f"so that its planes of symmetry lie along the grid, or raise most_off_axis to "
                f"accept the error."
            )
        if not np.linalg.eigvalsh(kept)[0] > 1e-10 * size:
            raise InputError(
                "The stiffness is not positive definite: some strain meets no resistance."
            )
        S = np.linalg.inv(kept[:3, :3])
        ex, ey, ez = 1.0 / np.diag(S)
        return cls(
            E=(float(ex), float(ey), float(ez)),
            nu_xy=float(-S[0, 1] * ex),
            nu_xz=float(-S[0, 2] * ex),
            nu_yz=float(-S[1, 2] * ey),
            G=(float(kept[3, 3]), float(kept[4, 4]), float(kept[5, 5])),
            source=source,
            off_axis=off,
        )

    @classmethod
    def from_effective(
        cls,
        effective: EffectiveConstants,
        *,
        source: str = "homogenised",
        most_off_axis: float = _OFF_AXIS,
    ) -> Orthotropic:
        """The nine constants of a homogenised cell; see `from_stiffness`."""
        return cls.from_stiffness(effective.stiffness, source=source, most_off_axis=most_off_axis)

    def turned(self, axes: tuple[int, int, int]) -> Orthotropic:
        """With its axes permuted: new axis n is the old one ``axes[n]`` (0, 1, 2 for x, y, z)."""
        if sorted(axes) != [0, 1, 2]:
            raise InputError(f"axes is an order of 0, 1, 2; got {axes}.")
        S = self.compliance
        shear = {frozenset(p): g for p, g in zip(_PAIRS, self.G, strict=True)}
        E = [self.E[a] for a in axes]
        nu = [float(-S[axes[a], axes[b]] * E[a]) for a, b in _PAIRS]
        G = [shear[frozenset((axes[a], axes[b]))] for a, b in _PAIRS]
        return self.replace(E=E, nu_xy=nu[0], nu_xz=nu[1], nu_yz=nu[2], G=G)

    def replace(self, **changes: Any) -> Orthotropic:
        """A copy with `changes`, validated again."""
        return dataclasses.replace(self, **changes)


def layered(
    material: Material,
    ratio_z: float,
    *,
    ratio_shear: float | None = None,
    source: str = INDICATIVE,
) -> Orthotropic:
    """A printed material that is softer (or stiffer) across its layers than along them.

    Parameters
    ----------
    material : Material
        Its E and nu are those along the layers, x and y.
    ratio_z : float
        Layer stiffness ratio E_z / E_x (> 0), of the user's own tests. The record of a material
        holds none, since it depends on printer and curing.
    ratio_shear : float, optional
        G_xz and G_yz over the isotropic shear modulus; by default ``sqrt(ratio_z)``, halfway (by
        ratio) between unchanged and as much lowered as E_z: an assumption of ours.
    source : str
        Where the ratios come from; without one the result is marked ``indicative``, and so it is
        where the material is.

    Returns
    -------
    Orthotropic
        ``nu_zx`` is the material's nu times sqrt(ratio_z), so that the coupling along and across
        layers stays as far from the limit of stability as in the material.
    """
    shear = math.sqrt(ratio_z) if ratio_shear is None and ratio_z > 0 else ratio_shear
    if not (0 < ratio_z < math.inf and shear is not None and 0 < shear < math.inf):
        raise InputError(
            f"Ratios of layer stiffness must be above 0 (1 is isotropic); got ratio_z {ratio_z}, "
            f"ratio_shear {ratio_shear}."
        )
    E, nu, G = material.E.value, material.nu.value, material.shear
    across = nu / math.sqrt(ratio_z)  # nu_xz = nu_zx E_x / E_z
    return Orthotropic(
        E=(E, E, ratio_z * E),
        nu_xy=nu,
        nu_xz=across,
        nu_yz=across,
        G=(G, shear * G, shear * G),
        source=INDICATIVE if material.indicative else source,
    )

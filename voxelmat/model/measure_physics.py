"""What a design is judged by beyond statics: vibration, cells, heat, contact, connection."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import ClassVar, Literal

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.heatcase import HeatCase
from voxelmat.model.indenter import Indenter
from voxelmat.model.loadcase import Foundation, GroundSpring, LoadCase, Support
from voxelmat.model.region import Region

__all__ = [
    "CellProperty",
    "CellTarget",
    "ConnectedSolid",
    "ContactPeak",
    "Frequency",
    "MeanTemperature",
    "PeakTemperature",
    "ThermalCompliance",
    "TrappedSupport",
    "Warpage",
]


def _exponent(value: float, what: str) -> None:
    if not (math.isfinite(value) and 2 <= value <= 64):
        raise InputError(f"The exponent of {what} lies in 2 to 64; got {value!r}.")


@dataclass(frozen=True, slots=True, kw_only=True)
class Frequency:
    """Lowest natural frequency, Hz, as a bound that is never above it.

    The lowest `count` modes enter a smooth minimum that lies below the lowest frequency by a
    factor of at most count^(1 / (2 exponent)) (4 % at worst with the values here).

    Attributes
    ----------
    supports : tuple of Support
        Held still.
    springs : tuple of GroundSpring or Foundation
        From regions to the ground.
    count : int
        Modes; a few more than are likely to coincide.
    carried : Region or None
        Nodes that carry a mass which does not depend on the design (a device on a mount).
    carried_tonne : float
        That mass, spread evenly over the nodes, tonne.
    exponent : float
    """

    supports: tuple[Support, ...] = ()
    springs: tuple[GroundSpring | Foundation, ...] = ()
    count: int = 4
    carried: Region | None = None
    carried_tonne: float = 0.0
    exponent: float = 16.0

    def __post_init__(self) -> None:
        if not 1 <= self.count <= 50:
            raise InputError(f"A frequency looks at 1 to 50 modes; got {self.count}.")
        if not (math.isfinite(self.carried_tonne) and self.carried_tonne >= 0):
            raise InputError(f"A carried mass must be >= 0 tonne; got {self.carried_tonne!r}.")
        if (self.carried is None) != (self.carried_tonne == 0):
            raise InputError("A carried mass needs both its region and its size above 0 tonne.")
        _exponent(self.exponent, "a frequency")


@dataclass(frozen=True, slots=True, kw_only=True)
class CellProperty:
    """An effective constant of the design as one cell of a periodic material.

    Attributes
    ----------
    kind : str
        ``"bulk"`` and ``"shear"``: averages of Voigt over all directions, MPa, the moduli
        themselves where the cell is isotropic (bulk: where it is cubic too); ``"young"`` and
        ``"poisson"``: for uniaxial stress along the first of `axes`, the latter as minus the
        strain along the second axis over that along the first; ``"shear_plane"``: modulus of the
        plane of `axes`, MPa; ``"axial"``: entry C_ab of the stiffness for normal strains along
        `axes`, MPa.
    axes : tuple of str
        Two of x, y, z; the second only counts where two are needed.
    """

    kind: Literal["bulk", "shear", "young", "poisson", "shear_plane", "axial"]
    axes: tuple[str, str] = ("x", "y")

    KINDS: ClassVar[tuple[str, ...]] = (
        "bulk", "shear", "young", "poisson", "shear_plane", "axial",
    )  # fmt: skip

    def __post_init__(self) -> None:
        if self.kind not in self.KINDS:
            raise InputError(
                f"A property of a cell is one of {', '.join(self.KINDS)}; got {self.kind!r}."
            )
        if len(self.axes) != 2 or any(a not in ("x", "y", "z") for a in self.axes):
            raise InputError(f"The axes of a cell's property are two of x, y, z; got {self.axes}.")
        if self.kind in ("poisson", "shear_plane") and self.axes[0] == self.axes[1]:
            raise InputError(f"'{self.kind}' needs two different axes; got {self.axes}.")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class CellTarget:
    """Relative error of a cell's stiffness against a wanted 6x6, sqrt(sum (C-C*)^2 / sum C*^2).

    Attributes
    ----------
    stiffness : ndarray, shape (6, 6)
        C*, MPa, order xx, yy, zz, xy, xz, yz with engineering shear, symmetric; nan where the
        entry does not matter.
    """

    stiffness: NDArray[np.float64]

    def __post_init__(self) -> None:
        C = np.array(self.stiffness, dtype=np.float64)
        if C.shape != (6, 6):
            raise InputError(f"A cell's target stiffness is 6x6; got shape {C.shape}.")
        known = ~np.isnan(C)
        if not known.any() or not np.any(C[known] != 0):
            raise InputError("A cell's target stiffness says nothing: every entry is nan or 0.")
        if not np.all(np.isfinite(C[known])):
            raise InputError("A cell's target stiffness holds entries that are not finite.")
        size = float(np.abs(C[known]).max())
        if not np.array_equal(known, known.T) or np.any(np.abs(C - C.T)[known] > 1e-6 * size):
            raise InputError("A cell's target stiffness must be symmetric.")
        C.flags.writeable = False
        object.__setattr__(self, "stiffness", C)


@dataclass(frozen=True, slots=True, kw_only=True)
class _Heat:
    """Base of what is read off a steady temperature.

    Attributes
    ----------
    heat_case : HeatCase
        Sources and films act on the shape as it is given, wherever the design puts material.
    void_W_per_m_K : float or None
        What an empty voxel conducts; a thousandth of the poorest resin where left out.
    """

    heat_case: HeatCase
    void_W_per_m_K: float | None = None

    def __post_init__(self) -> None:
        v = self.void_W_per_m_K
        if v is not None and not (math.isfinite(v) and v > 0):
            raise InputError(f"Empty voxels must conduct above 0 W/(m K); got {v!r}.")


@dataclass(frozen=True, slots=True, kw_only=True)
class PeakTemperature(_Heat):
    """Largest steady temperature, degC, by a corrected p-norm.

    The norm is over what exceeds the coldest temperature that the heat case gives.

    Attributes
    ----------
    region : Region or None
        Where it counts; everywhere where left out.
    exponent : float
    """

    region: Region | None = None
    exponent: float = 12.0

    def __post_init__(self) -> None:
        _Heat.__post_init__(self)
        _exponent(self.exponent, "a peak temperature")


@dataclass(frozen=True, slots=True, kw_only=True)
class MeanTemperature(_Heat):
    """Steady temperature, mean over the nodes of a region, degC.

    Attributes
    ----------
    region : Region
        A single node of it is a point.
    """

    region: Region


@dataclass(frozen=True, slots=True, kw_only=True)
class ThermalCompliance(_Heat):
    """Heat times temperature over the coldest one that is given, summed, mW K."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ContactPeak:
    """Largest pressure under a rigid body that is pressed on the design, MPa.

    Attributes
    ----------
    indenter : Indenter
        A plane, punch, ball, roller or mesh.
    load_case : LoadCase
        Holds the part; may have forces too.
    depth_mm, force_N : float or None
        One of them: travel after first touch, or force along the push.
    exponent : float
        Of the p-norm over the pressures, each a mean over the faces round a node.
    """

    indenter: Indenter
    load_case: LoadCase
    depth_mm: float | None = None
    force_N: float | None = None
    exponent: float = 8.0

    def __post_init__(self) -> None:
        aim = self.depth_mm if self.depth_mm is not None else self.force_N
        if (self.depth_mm is None) == (self.force_N is None) or aim is None:
            raise InputError("A contact peak takes depth_mm or force_N, one of the two.")
        if not (math.isfinite(aim) and aim > 0):
            raise InputError(f"A contact peak's depth (mm) or force (N) is above 0; got {aim!r}.")
        _exponent(self.exponent, "a contact peak")


@dataclass(frozen=True, slots=True, kw_only=True)
class TrappedSupport:
    """How badly empty voxels are shut in, where support could not be washed out.

    Empty voxels make heat, solid ones insulate and the open surface is cold: the p-norm of what
    warms up, relative to that of the shape when it is all empty. In a block of 9^3 voxels a well
    of 3 x 3, 6 deep, gives 3, a cavity of 3^3 with a channel one voxel wide 17, and the same
    cavity shut 131; a shut cavity of 2^3 in a small beam 4: 3 is a limit to begin with.

    Attributes
    ----------
    closed : Region or None
        Surface that is shut in the finished product and lets nothing out.
    exponent : float
    """

    closed: Region | None = None
    exponent: float = 6.0

    def __post_init__(self) -> None:
        _exponent(self.exponent, "trapped support")


@dataclass(frozen=True, slots=True, kw_only=True)
class ConnectedSolid:
    """How badly solid voxels are cut off from where the part is held.

    Solid voxels make heat, empty ones insulate and held nodes are cold: the p-norm of what warms
    up, relative to that of the shape when it is all solid. Pieces that are each held count as
    connected. In a block of 14 x 7 x 7 voxels held at its end a bar of 3 x 3 along it gives 0.75;
    with its middle voxels taken out over a length of 1, 19; half the bar and an island of 3^3, 18;
    the same joined by a neck of one voxel, 0.99; all at half density, 2: 2 is a limit to begin
    with. An island of 8 voxels gives 5, one of a single voxel 0.7: what is smaller than the filter
    is left to the filter. A made part reads higher than its design where a neck is so thin
    that its outline only partly fills voxels (5 for a design at 2), though it is in one piece.

    Attributes
    ----------
    supports : tuple of Support
        Where the part is held, in whatever directions; the supports and springs of all load
        cases where neither these nor `springs` are given.
    springs : tuple of GroundSpring or Foundation
        From regions to the ground; these hold too.
    exponent : float
    """

    supports: tuple[Support, ...] = ()
    springs: tuple[GroundSpring | Foundation, ...] = ()
    exponent: float = 6.0

    def __post_init__(self) -> None:
        _exponent(self.exponent, "a connected solid")


@dataclass(frozen=True, slots=True, kw_only=True)
class Warpage:
    """How far a region moves when the temperature of the whole part changes, rms, mm.

    Attributes
    ----------
    change_K : float
        Of the temperature, from where the part is free of stress.
    region : Region
        Its nodes count.
    supports : tuple of Support
        Held still; they must leave the part no free motion.
    springs : tuple of GroundSpring or Foundation
    direction : tuple of float
        Along which the displacement counts; scaled to length 1.
    """

    change_K: float
    region: Region
    supports: tuple[Support, ...] = ()
    springs: tuple[GroundSpring | Foundation, ...] = ()
    direction: tuple[float, float, float] = (0.0, 0.0, 1.0)

    def __post_init__(self) -> None:
        if not (math.isfinite(self.change_K) and self.change_K != 0):
            raise InputError(f"Warping needs a change of temperature, K; got {self.change_K!r}.")
        length = math.sqrt(sum(d * d for d in self.direction))
        if not (math.isfinite(length) and length > 0):
            raise InputError(f"The direction of warping must not be 0; got {self.direction}.")
        x, y, z = (float(d) / length for d in self.direction)
        object.__setattr__(self, "direction", (x, y, z))

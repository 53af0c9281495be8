"""What an optimiser is asked for: resins, objective, limits, and what it must leave alone."""

from __future__ import annotations

import hashlib
import itertools
import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.design_rules import (
    ChosenZones,
    LoadScatter,
    MaterialScatter,
    Robust,
    Skin,
    Zones,
    check_rules,
)
from voxelmat.model.goal import AtLeast, AtMost, Maximise, Minimise, plain
from voxelmat.model.measure import Compliance, TargetDeflection, mask
from voxelmat.provenance import text_digest

__all__ = [
    "Compliance",
    "DesignSpec",
    "Limit",
    "MassLimit",
    "Objective",
    "Projection",
    "ResinLimit",
    "TargetDeflection",
    "VolumeLimit",
]

Bools = NDArray[np.bool_]


def _positive(value: float, what: str, unit: str) -> None:
    if not (math.isfinite(value) and value > 0):
        raise InputError(f"{what} must be above 0 {unit}; got {value!r}.")


@dataclass(frozen=True, slots=True, kw_only=True)
class VolumeLimit:
    """At most this fraction of the shape's volume is solid (kept voxels are not counted)."""

    fraction: float

    def __post_init__(self) -> None:
        if not 0 < self.fraction < 1:
            raise InputError(f"A volume limit lies between 0 and 1; got {self.fraction!r}.")


@dataclass(frozen=True, slots=True, kw_only=True)
class MassLimit:
    """At most this mass, tonne, in the voxels that are designed (kept ones are not counted)."""

    mass: float

    def __post_init__(self) -> None:
        _positive(self.mass, "A mass limit", "tonne")


@dataclass(frozen=True, slots=True, kw_only=True)
class ResinLimit:
    """At most this fraction of the shape's volume is one resin (kept voxels not counted)."""

    resin: str
    fraction: float

    def __post_init__(self) -> None:
        if not 0 < self.fraction < 1:
            raise InputError(
                f"The limit on '{self.resin}' lies between 0 and 1; got {self.fraction!r}. "
                "Leave a resin out of the design to forbid it."
            )


Objective = Compliance | TargetDeflection | Minimise | Maximise
Limit = VolumeLimit | MassLimit | ResinLimit | AtMost | AtLeast

_METHODS = ("auto", "mma", "gcmma", "oc", "mirror")
#: More would not fit a tray, and a softmax over more is not tested.
_MOST_RESINS = 40


@dataclass(frozen=True, slots=True, kw_only=True)
class Projection:
    """Continuation of the smoothed step that makes densities empty or solid, and of the penalty.

    Attributes
    ----------
    sharpness : tuple of float
        One value a stage, rising; 0 means no projection.
    penalties : tuple of float
        Penalty exponent of each stage, rising; none: `DesignSpec.penalty` from the start. Where
        there are fewer of these or of the sharpnesses than stages, the last one stays.
    every : int
        Iterations a stage; the last one lasts to the end.
    threshold : float
        Filtered density that counts as the border, between 0 and 1.
    """

    sharpness: tuple[float, ...] = (0.0, 2.0, 4.0, 8.0, 16.0)
    penalties: tuple[float, ...] = ()
    every: int = 15
    threshold: float = 0.5

    def __post_init__(self) -> None:
        s = tuple(float(b) for b in self.sharpness)
        rising = all(a < b for a, b in itertools.pairwise(s))
        if not s or not all(math.isfinite(b) and b >= 0 for b in s) or not rising:
            raise InputError(f"Projection sharpness must be >= 0 and rise; got {self.sharpness}.")
        if self.every < 1 or not 0 < self.threshold < 1:
            raise InputError(
                "A projection needs at least 1 iteration a stage and a threshold between 0 and 1; "
                f"got {self.every} and {self.threshold}."
            )
        rising = all(a < b for a, b in itertools.pairwise(self.penalties))
        if not rising or any(not math.isfinite(p) or p < 1 for p in self.penalties):
            raise InputError(
                f"The penalties of a continuation must be >= 1 and rise; got {self.penalties}."
            )
        object.__setattr__(self, "sharpness", s)
        object.__setattr__(self, "penalties", tuple(float(p) for p in self.penalties))

    @property
    def stages(self) -> int:
        """How many there are."""
        return max(len(self.sharpness), len(self.penalties))

    def stage(self, iteration: int) -> int:
        """Which stage an iteration (from 0) belongs to."""
        return min(iteration // self.every, self.stages - 1)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class DesignSpec:
    """All that `voxelmat.topopt.optimise.optimise` needs besides a part and its load cases.

    Attributes
    ----------
    resins : tuple of str
        Names of the part's resins to choose from. With two or more, every voxel is a blend.
    objective : Compliance, TargetDeflection, Minimise or Maximise
        A measure alone is minimised; ``Minimise(measure=...)`` and ``Maximise(measure=...)`` take
        any measure of `voxelmat.model.measure`, `measure_amount` and `measure_physics`.
    limits : tuple of VolumeLimit, MassLimit, ResinLimit, AtMost, AtLeast
        The last two take any measure.
    void : bool
        Whether voxels may become empty.
    filter_radius : float
        mm; sets the least size of struts and holes, and how fast a blend may change.
    penalty : float
        Exponent that makes half-solid voxels a bad bargain; blends are never penalised.
    void_law : str
        ``"bounded"`` keeps the Hashin-Shtrikman bound at any nu; ``"plain"`` scales K and G
        alike and is for comparison with published values at small nu.
    void_stiffness : float
        What an empty voxel keeps, relative to the softest resin.
    projection : Projection
    fixed_resin : mapping of str to ndarray of bool
        Voxels that must be this resin (and solid).
    solid, empty : ndarray of bool or None
        Voxels that must be solid, must be empty; the shape of the grid, ``[i, j, k]``.
    keep : ndarray of bool or None
        Voxels that keep the blend which the part gives them. Bought-in bodies always do.
    protected : ndarray of bool or None
        Region in which the shape's own surface stays solid, `protected_depth` deep.
    protected_depth : float or None
        mm; one voxel where left out.
    symmetry : tuple of str
        ``"x"``: mirror halves about the middle of the shape's bounding box along x; and so on.
    blends : str
        ``"free"``: any blend may be printed. ``"pure"``: blends are driven to pure resins as the
        projection sharpens, and each voxel ends as the resin it has most of.
    extruded : tuple of str
        Axes along which the design does not change.
    repeated : mapping of str to int
        How many times the design is repeated along an axis of the shape's bounding box.
    zones : Zones, ChosenZones or None
        One blend a zone; solid or empty stays free in each voxel.
    robust : Robust or None
        Hold with borders further in and out, which sets least sizes; see
        `voxelmat.topopt.sizes.minimum_from_profile`.
    scatter : tuple of MaterialScatter, LoadScatter
    skin : Skin or None
    support_angle : float or None
        Least angle from the horizontal that prints without support, degrees; z is up.
    interface_width : float or None
        mm over which the share of any resin takes at least to go from 0 to 1.
    blend_radius : float or None
        mm; of the blends' own filter, the filter radius where left out.
    most_resins : int or None
        At most this many of the resins are used: the least used one is taken away and the design
        made again, until few enough are left.
    iterations : int
    levels : int
        Blends in the palette of the result, at most.
    palette_error : float or None
        Share of the objective (of the target, for a target deflection) that rounding to a palette
        may cost, and by how much of a limit it may overstep it; the palette is then the smallest
        that does. None: as many blends as `levels` allows.
    method : str
        ``"mma"`` (moving asymptotes; takes steps back unless objective and limits are compliance
        and amounts), ``"gcmma"`` (globally convergent: more solves, never a worse design),
        ``"oc"`` (optimality criteria; one limit), ``"mirror"`` (mirror descent on the fractions)
        or ``"auto"``: ``"oc"`` for compliance under one amount with only solid or empty to
        choose, else ``"mma"``.
    move : float
        Longest change of an unknown in one iteration.
    seed : int
        Of the starts of `voxelmat.topopt.starts.ranked_starts`; one run draws no random numbers.
    """

    resins: tuple[str, ...]
    objective: Objective
    filter_radius: float
    limits: tuple[Limit, ...] = ()
    void: bool = True
    penalty: float = 3.0
    void_law: Literal["bounded", "plain"] = "bounded"
    void_stiffness: float = 1e-6
    projection: Projection = field(default_factory=Projection)
    fixed_resin: Mapping[str, Bools] = field(default_factory=dict)
    solid: Bools | None = None
    empty: Bools | None = None
    keep: Bools | None = None
    protected: Bools | None = None
    protected_depth: float | None = None
    symmetry: tuple[str, ...] = ()
    blends: Literal["free", "pure"] = "free"
    extruded: tuple[str, ...] = ()
    repeated: Mapping[str, int] = field(default_factory=dict)
    zones: Zones | ChosenZones | None = None
    robust: Robust | None = None
    scatter: tuple[MaterialScatter | LoadScatter, ...] = ()
    skin: Skin | None = None
    support_angle: float | None = None
    interface_width: float | None = None
    blend_radius: float | None = None
    most_resins: int | None = None
    iterations: int = 80
    levels: int = 64
    palette_error: float | None = None
    method: Literal["auto", "mma", "gcmma", "oc", "mirror"] = "auto"
    move: float = 0.2
    seed: int = 0

    def __post_init__(self) -> None:
        put = object.__setattr__
        put(self, "resins", tuple(self.resins))
        if isinstance(self.objective, Minimise) and isinstance(
            self.objective.measure, Compliance | TargetDeflection
        ):
            put(self, "objective", self.objective.measure)
        put(self, "limits", tuple(self.limits))
        for name in ("symmetry", "extruded", "scatter"):
            put(self, name, tuple(getattr(self, name)))
        put(self, "repeated", dict(self.repeated))
        fixed = {r: mask(m, f"The region fixed to '{r}'") for r, m in self.fixed_resin.items()}
        put(self, "fixed_resin", fixed)
        for name in ("solid", "empty", "keep", "protected"):
            if (given := getattr(self, name)) is not None:
                put(self, name, mask(given, f"The region '{name}'"))
        self._check_numbers()
        self._check_choices()
        check_rules(self)

    def _check_numbers(self) -> None:
        _positive(self.filter_radius, "The filter radius", "mm")
        if self.protected_depth is not None:
            _positive(self.protected_depth, "The depth of a protected surface", "mm")
        if not (math.isfinite(self.penalty) and self.penalty >= 1):
            raise InputError(f"The penalty must be at least 1; got {self.penalty!r}.")
        if not 0 < self.void_stiffness <= 1e-2:
            raise InputError(
                f"The stiffness of empty voxels must lie in 0 to 0.01; got {self.void_stiffness}."
            )
        if self.iterations < 1 or not 2 <= self.levels <= 4096 or not 0 < self.move <= 1:
            raise InputError(
                "A design needs at least 1 iteration, 2 to 4096 palette levels and a move in "
                f"0 to 1; got {self.iterations}, {self.levels}, {self.move}."
            )

    def _check_choices(self) -> None:
        if not self.resins or len(set(self.resins)) != len(self.resins):
            raise InputError(f"A design names each resin once, at least one; got {self.resins}.")
        if len(self.resins) > _MOST_RESINS:
            raise InputError(
                f"A design chooses among at most {_MOST_RESINS} resins; got {len(self.resins)}."
            )
        if not self.void and len(self.resins) == 1:
            raise InputError(
                f"With the one resin '{self.resins[0]}' and no empty voxels allowed there is "
                "nothing to design; add a resin or allow empty voxels."
            )
        if any(a not in "xyz" or len(a) != 1 for a in self.symmetry):
            raise InputError(f"Symmetry is any of x, y, z; got {self.symmetry}.")
        if self.method not in _METHODS:
            raise InputError(f"The method is one of {', '.join(_METHODS)}; got {self.method!r}.")
        if self.void_law not in ("bounded", "plain"):
            raise InputError(f"The void law is bounded or plain; got {self.void_law!r}.")
        simple = [x for x in self.limits if not isinstance(x, AtMost | AtLeast)]
        kinds = [(type(x).__name__, getattr(x, "resin", "")) for x in simple]
        if len(set(kinds)) != len(kinds):
            raise InputError("The same quantity is limited twice; keep the tighter limit.")

    @property
    def digest(self) -> str:
        """SHA-256 over everything but the number of iterations and palette levels."""
        arrays: list[NDArray[Any]] = []
        head = {
            name: plain(getattr(self, name), arrays)
            for name in self.__dataclass_fields__
            if name not in ("iterations", "levels", "palette_error", "seed")
        }
        code = hashlib.sha256(text_digest(head).encode())
        for array in arrays:
            code.update(b"|" + np.ascontiguousarray(array.T).tobytes())
        return code.hexdigest()

    @property
    def measure(self) -> object:
        """What the objective is about."""
        goal = self.objective
        return goal.measure if isinstance(goal, Minimise | Maximise) else goal

    @property
    def measures(self) -> tuple[object, ...]:
        """All measures of the objective and of the general limits, the objective's first."""
        limits = [x.measure for x in self.limits if isinstance(x, AtMost | AtLeast)]
        return (self.measure, *limits)

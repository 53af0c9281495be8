"""What a design is judged by in statics: stiffness, motion, strength, the output of a mechanism."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.interface import Bond

__all__ = [
    "Compliance",
    "Displacement",
    "InterfaceTraction",
    "OutputOfMechanism",
    "Stress",
    "Stretch",
    "TargetDeflection",
    "WorstCompliance",
    "mask",
]

Bools = NDArray[np.bool_]
Vector = tuple[float, float, float]


def mask(value: object, what: str) -> Bools:
    """A read-only copy of a 3-D array of true and false."""
    array = np.asarray(value)
    if array.ndim != 3 or array.dtype != np.bool_:
        raise InputError(f"{what} must be a 3-D array of true and false; got {array.dtype}, "
                         f"{array.ndim}-D.")  # fmt: skip
    out = np.array(array, order="F")
    out.flags.writeable = False
    return out


def _nodes(value: object, what: str) -> Bools:
    nodes = mask(value, f"The nodes of {what}")
    if not nodes.any():
        raise InputError(f"{what[0].upper()}{what[1:]} selects no node; name a surface of the "
                         "part.")  # fmt: skip
    return nodes


def _unit(direction: Sequence[float], what: str) -> Vector:
    length = math.sqrt(sum(d * d for d in direction))
    if len(direction) != 3 or not (math.isfinite(length) and length > 0):
        raise InputError(f"{what} must not be zero; got {tuple(direction)}.")
    x, y, z = (float(d) / length for d in direction)
    return x, y, z


def _exponent(value: float, what: str) -> None:
    if not (math.isfinite(value) and 4 <= value <= 64):
        raise InputError(f"The exponent of {what} lies in 4 to 64; got {value!r}.")


@dataclass(frozen=True, slots=True, kw_only=True)
class Compliance:
    """Work of the loads, N mm: the less, the stiffer.

    Summed over the load cases, each times its `LoadCase.weight`.

    Attributes
    ----------
    load_cases : tuple of str
        Names of those that count; all where left out.
    """

    load_cases: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class WorstCompliance:
    """Greatest weighted work of the loads over the load cases, N mm.

    As an objective a smooth maximum stands for it, corrected to the true one as the run goes on;
    as an upper limit every load case is limited by itself, which is exact.

    Attributes
    ----------
    load_cases : tuple of str
        Names of those that count; all where left out.
    exponent : float
        Of the smooth maximum, which of two equal cases is 2^(1 / exponent) times either.
    """

    load_cases: tuple[str, ...] = ()
    exponent: float = 16.0

    def __post_init__(self) -> None:
        _exponent(self.exponent, "a worst compliance")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Displacement:
    """How far nodes move, mm.

    Attributes
    ----------
    nodes : ndarray of bool, shape ``grid.node_shape``
        One node for a point, several for a mean or the largest.
    direction : tuple of float
        Scaled to length 1.
    load_case : str or None
        May be left out where there is only one.
    of : str
        ``"mean"``: mean motion along `direction`, with its sign; ``"largest"``: largest size of
        the motion along it (a smooth maximum, corrected to the true one as the run goes on).
    exponent : float
        Of the smooth maximum.
    label : str
        What people call the place.
    """

    nodes: Bools
    direction: Vector = (0.0, 0.0, 1.0)
    load_case: str | None = None
    of: Literal["mean", "largest"] = "mean"
    exponent: float = 8.0
    label: str = ""

    def __post_init__(self) -> None:
        object.__setattr__(self, "nodes", _nodes(self.nodes, "a displacement"))
        object.__setattr__(self, "direction", _unit(self.direction, "A displacement's direction"))
        if self.of not in ("mean", "largest"):
            raise InputError(f"A displacement is the mean or the largest; got {self.of!r}.")
        _exponent(self.exponent, "a largest displacement")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TargetDeflection:
    """A map of how much a surface is to move under one load case.

    Its value is the relative error sqrt(sum (u - u*)^2 / sum u*^2) over the nodes, or the worst
    of them, max |u - u*| / max |u*|.

    Attributes
    ----------
    nodes : ndarray of bool, shape ``grid.node_shape``
        Where the displacement counts.
    target : ndarray of float, shape ``grid.node_shape``
        Wanted displacement along `direction`, mm; only read at `nodes`.
    direction : tuple of float
        Scaled to length 1.
    load_case : str or None
        Name of the load case; may be left out where there is only one.
    error : str
        ``"rms"`` or ``"worst"``.
    exponent : float
        Of the smooth maximum for the worst.
    """

    nodes: Bools
    target: NDArray[np.float64]
    direction: Vector = (0.0, 0.0, 1.0)
    load_case: str | None = None
    error: Literal["rms", "worst"] = "rms"
    exponent: float = 8.0

    def __post_init__(self) -> None:
        nodes = _nodes(self.nodes, "a target deflection")
        target = np.array(self.target, dtype=np.float64, order="F")
        if target.shape != nodes.shape:
            raise InputError(
                f"A target deflection has nodes of shape {nodes.shape} and targets of shape "
                f"{target.shape}; they must be the same."
            )
        if not np.all(np.isfinite(target[nodes])):
            raise InputError("A target deflection (mm) holds values that are no number.")
        if not np.any(target[nodes] != 0):
            raise InputError(
                "A target deflection is zero at every node, so an error relative to it has no "
                "meaning; minimise compliance instead."
            )
        if self.error not in ("rms", "worst"):
            raise InputError(f"The error of a target is rms or worst; got {self.error!r}.")
        _exponent(self.exponent, "a worst error")
        target.flags.writeable = False
        object.__setattr__(self, "nodes", nodes)
        object.__setattr__(self, "target", target)
        object.__setattr__(self, "direction", _unit(self.direction, "A target's direction"))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class OutputOfMechanism:
    """How far the output of a compliant mechanism moves, mm, against the workpiece's springs.

    Springs act along x, y or z, so both directions must. The input spring stands for the
    actuator: its blocking force is the load case's force there, its free stroke that force over
    the spring.

    Attributes
    ----------
    output, input : ndarray of bool, shape ``grid.node_shape``
    output_direction, input_direction : tuple of float
        Along one axis each; the output counts along its own, with its sign.
    output_stiffness, input_stiffness : float
        Of all springs of that end together, N/mm (>= 0; 0 for none).
    load_case : str or None
        The one that pushes the input; may be left out where there is only one.
    """

    output: Bools
    input: Bools
    output_direction: Vector
    input_direction: Vector
    output_stiffness: float
    input_stiffness: float
    load_case: str | None = None

    def __post_init__(self) -> None:
        for end in ("output", "input"):
            nodes = _nodes(getattr(self, end), f"the {end} of a mechanism")
            axis = _unit(getattr(self, f"{end}_direction"), f"The {end}'s direction")
            if max(abs(d) for d in axis) < 1.0 - 1e-12:
                raise InputError(
                    f"The {end} of a mechanism acts along x, y or z; got the direction {axis}."
                )
            stiffness = getattr(self, f"{end}_stiffness")
            if not (math.isfinite(stiffness) and stiffness >= 0):
                raise InputError(
                    f"The spring at the {end} of a mechanism needs >= 0 N/mm; got {stiffness!r}."
                )
            object.__setattr__(self, end, nodes)
            object.__setattr__(self, f"{end}_direction", axis)
        if (self.output & self.input).any():
            raise InputError("The input and the output of a mechanism share nodes; part them.")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Strength:
    """Largest use of each resin's own strength: 1 where it would fail."""

    region: Bools | None = None
    load_cases: tuple[str, ...] = ()
    resins: tuple[str, ...] = ()
    side: Literal["value", "low"] = "value"
    exponent: float = 8.0

    def __post_init__(self) -> None:
        if self.region is not None:
            object.__setattr__(self, "region", mask(self.region, "The region of a strength"))
        if self.side not in ("value", "low"):
            raise InputError(f"A strength is judged by its value or its low end; got {self.side}.")
        _exponent(self.exponent, "a strength")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Stress(_Strength):
    """Largest von Mises stress over the resin's own tensile strength; 1 is all of it.

    A blend's strength is taken as the harmonic mean of its resins', which is nearer to the
    weaker (an assumption: no record holds the strength of a blend). In half-empty voxels the
    stress of the solid counts by the root of the density, so that material can vanish.

    Attributes
    ----------
    region : ndarray of bool or None
        Voxels that are judged, ``[i, j, k]``; all where left out. Leave out those where loads
        and supports act: stresses there grow with every refinement of the grid.
    load_cases : tuple of str
        All where left out; the worst counts.
    resins : tuple of str
        Those that are judged, blends by their share of them; all where left out.
    side : str
        ``"value"``, or ``"low"`` for the lower end of each strength's range.
    exponent : float
        Of the smooth maximum, corrected to the true one as the run goes on.
    """


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Stretch(_Strength):
    """Largest equivalent strain over the resin's own elongation at break; 1 is all of it.

    A blend's elongation is taken as the harmonic mean of its resins'. Small strains: beyond
    some 10 % a check with large strains is due. Attributes as for `Stress`.
    """


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class InterfaceTraction:
    """Largest use of the strength of the interfaces between resins; 1 is all of it.

    Designs blend, so an interface is a matter of degree: between two neighbouring voxels the
    share of the volume that changes from resin m to resin n counts, see
    `voxelmat.topopt.response_interface`.

    Attributes
    ----------
    bonds : tuple of Bond
        A record for every pair of the design's resins.
    region : ndarray of bool or None
        Voxels whose faces are judged (both sides must lie in it); all where left out.
    load_cases : tuple of str
        All where left out; the worst counts.
    side : str
        ``"value"``, or ``"low"`` for the lower end of the strengths' ranges.
    exponent : float
        Of the smooth maximum.
    """

    bonds: tuple[Bond, ...]
    region: Bools | None = None
    load_cases: tuple[str, ...] = ()
    side: Literal["value", "low"] = "value"
    exponent: float = 8.0

    def __post_init__(self) -> None:
        if self.region is not None:
            object.__setattr__(self, "region", mask(self.region, "The region of interfaces"))
        if self.side not in ("value", "low"):
            raise InputError(f"A bond is judged by its value or its low end; got {self.side!r}.")
        _exponent(self.exponent, "an interface")

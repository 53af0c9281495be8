"""Named regions: where a support, a load, a material rule or a requirement applies."""

from __future__ import annotations

import math
from abc import ABC, abstractmethod
from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol, runtime_checkable

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.part import Part
from voxelmat.model.region_faces import nodes_of_faces, voxels_of_faces
from voxelmat.model.surface import Faces, carriers, exposed_faces, visible_from

__all__ = [
    "BodyRegion",
    "Box",
    "Cylinder",
    "FaceRegion",
    "HalfSpace",
    "LabelRegion",
    "MeshRegion",
    "PatchRegion",
    "Region",
    "Sphere",
    "solid_nodes",
]

Points = NDArray[np.float64]
Bools = NDArray[np.bool_]
Vector = tuple[float, float, float]


@runtime_checkable
class Region(Protocol):
    """What every region answers about a part."""

    @property
    def name(self) -> str:
        """What the user calls it."""

    def voxels(self, part: Part) -> Bools:
        """Solid voxels in the region, ``[i, j, k]``."""

    def nodes(self, part: Part) -> Bools:
        """Nodes of solid voxels in the region, ``[i, j, k]`` on ``grid.node_shape``."""

    def faces(self, part: Part) -> Faces:
        """Exposed faces in the region."""


def solid_nodes(solid: Bools) -> Bools:
    """Nodes that touch a solid voxel; shape one larger than `solid` along each axis."""
    out = np.zeros(tuple(n + 1 for n in solid.shape), dtype=bool)
    for corner in range(8):
        at = tuple(slice(corner >> a & 1, (corner >> a & 1) + solid.shape[a]) for a in range(3))
        out[at] |= solid
    return out


def _lattice(axes: tuple[Points, Points, Points], inside: Callable[[Points], Bools]) -> Bools:
    """Evaluate `inside` on a lattice plane by plane, so that memory stays small."""
    x, y, z = axes
    out = np.zeros((len(x), len(y), len(z)), dtype=bool, order="F")
    plane = np.empty((len(x) * len(y), 3))
    plane[:, 0] = np.repeat(x, len(y))
    plane[:, 1] = np.tile(y, len(x))
    for k, height in enumerate(z):
        plane[:, 2] = height
        out[:, :, k] = inside(plane).reshape(len(x), len(y))
    return out


def _positive(value: float, what: str, name: str) -> None:
    if not (math.isfinite(value) and value > 0):
        raise InputError(f"Region '{name}': the {what} must be above 0 mm; got {value}.")


def _unit(vector: Vector, name: str) -> NDArray[np.float64]:
    length = math.sqrt(sum(v * v for v in vector))
    if not (math.isfinite(length) and length > 0):
        raise InputError(f"Region '{name}': a direction must not be zero; got {vector}.")
    return np.asarray(vector, dtype=float) / length


@dataclass(frozen=True, slots=True, kw_only=True)
class _Solid(ABC):
    """Base of the regions that are a set of points."""

    name: str

    @abstractmethod
    def contains(self, points: Points) -> Bools:
        """Whether each of `points` (n, 3), in mm, lies in the region."""

    def voxels(self, part: Part) -> Bools:
        """Solid voxels whose centre lies in the region."""
        return np.asarray(_lattice(part.grid.centres(), self.contains) & part.solid)

    def nodes(self, part: Part) -> Bools:
        """Nodes of solid voxels that lie in the region."""
        return np.asarray(_lattice(part.grid.nodes(), self.contains) & solid_nodes(part.solid))

    def faces(self, part: Part) -> Faces:
        """Exposed faces whose centre lies in the region."""
        every = exposed_faces(part)
        return every.select(self.contains(every.centre))


@dataclass(frozen=True, slots=True, kw_only=True)
class Box(_Solid):
    """An axis-aligned box from `low` to `high`, mm."""

    low: Vector
    high: Vector

    def __post_init__(self) -> None:
        if not all(a < b for a, b in zip(self.low, self.high, strict=True)):
            raise InputError(
                f"Region '{self.name}': a box needs low < high on each axis; "
                f"got {self.low} to {self.high} mm."
            )

    def contains(self, points: Points) -> Bools:
        """Points on the border belong to the box."""
        return np.asarray(np.all((points >= self.low) & (points <= self.high), axis=1))


@dataclass(frozen=True, slots=True, kw_only=True)
class Sphere(_Solid):
    """A ball, mm."""

    centre: Vector
    radius: float

    def __post_init__(self) -> None:
        _positive(self.radius, "radius", self.name)

    def contains(self, points: Points) -> Bools:
        """Within the radius of the centre."""
        return np.asarray(((points - np.asarray(self.centre)) ** 2).sum(axis=1) <= self.radius**2)


@dataclass(frozen=True, slots=True, kw_only=True)
class Cylinder(_Solid):
    """A straight round cylinder between two end centres, with an optional bore, mm."""

    start: Vector
    end: Vector
    radius: float
    inner_radius: float = 0.0

    def __post_init__(self) -> None:
        _positive(self.radius, "radius", self.name)
        if not 0 <= self.inner_radius < self.radius:
            raise InputError(
                f"Region '{self.name}': the inner radius must lie in 0 to {self.radius} mm; "
                f"got {self.inner_radius}."
            )
        ax, ay, az = (e - s for s, e in zip(self.start, self.end, strict=True))
        _unit((ax, ay, az), self.name)

    def contains(self, points: Points) -> Bools:
        """Between the ends and between the two radii."""
        start = np.asarray(self.start)
        axis = np.asarray(self.end) - start
        along = (points - start) @ axis / (axis @ axis)
        off = points - start - along[:, None] * axis
        radius = np.sqrt((off**2).sum(axis=1))
        return np.asarray(
            (along >= 0) & (along <= 1) & (radius <= self.radius) & (radius >= self.inner_radius)
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class HalfSpace(_Solid):
    """Everything on the far side of a plane: where ``(p - point) . normal >= 0``."""

    point: Vector
    normal: Vector

    def __post_init__(self) -> None:
        _unit(self.normal, self.name)

    def contains(self, points: Points) -> Bools:
        """On the side that the normal points to."""
        return np.asarray((points - np.asarray(self.point)) @ _unit(self.normal, self.name) >= 0)


@dataclass(frozen=True, slots=True, kw_only=True)
class MeshRegion(_Solid):
    """The inside of a closed mesh; `inside` is its point test (see `voxelmat.shape.inside`)."""

    inside: Callable[[Points], Bools]

    def contains(self, points: Points) -> Bools:
        """Inside the mesh."""
        return np.asarray(self.inside(points), dtype=bool)


@dataclass(frozen=True, slots=True, kw_only=True)
class LabelRegion:
    """Voxels whose blend is one of the given palette labels."""

    name: str
    labels: tuple[int, ...]

    def voxels(self, part: Part) -> Bools:
        """Solid voxels with such a label."""
        return np.asarray(np.isin(part.labels, self.labels) & part.solid)

    def nodes(self, part: Part) -> Bools:
        """Their nodes."""
        return solid_nodes(self.voxels(part))

    def faces(self, part: Part) -> Faces:
        """Their exposed faces."""
        every = exposed_faces(part)
        return every.select(self.voxels(part)[tuple(every.voxel.T)])


@dataclass(frozen=True, slots=True, kw_only=True)
class BodyRegion:
    """The voxels of one body."""

    name: str
    body: str

    def voxels(self, part: Part) -> Bools:
        """Solid voxels of the body; `InputError` where the part has no such body."""
        if self.body not in part.bodies:
            raise InputError(
                f"Region '{self.name}': the part has no body '{self.body}'; "
                f"it has {', '.join(part.bodies) or 'none'}."
            )
        return np.asarray(part.bodies[self.body] & part.solid)

    def nodes(self, part: Part) -> Bools:
        """Their nodes."""
        return solid_nodes(self.voxels(part))

    def faces(self, part: Part) -> Faces:
        """Their exposed faces."""
        every = exposed_faces(part)
        return every.select(self.voxels(part)[tuple(every.voxel.T)])


_AXES = "xyz"


def parse_side(text: str, name: str) -> tuple[int, int]:
    """``"z-"`` to ``(2, -1)``."""
    if len(text) == 2 and text[0] in _AXES and text[1] in "+-":
        return _AXES.index(text[0]), 1 if text[1] == "+" else -1
    raise InputError(f"Region '{name}': a side is one of x-, x+, y-, y+, z-, z+; got {text!r}.")


@dataclass(frozen=True, slots=True, kw_only=True)
class FaceRegion:
    """The part's outermost material on one side of its bounding box.

    Attributes
    ----------
    side : str
        ``"x-"`` to ``"z+"``.
    depth : float
        How deep below the outermost node plane it reaches, mm; 0 takes that plane alone.
    """

    name: str
    side: str
    depth: float = 0.0

    def __post_init__(self) -> None:
        parse_side(self.side, self.name)
        if not (math.isfinite(self.depth) and self.depth >= 0):
            raise InputError(f"Region '{self.name}': depth must be >= 0 mm; got {self.depth}.")

    def _reach(self, part: Part) -> tuple[int, int, float]:
        """Axis, side, and the coordinate (mm) that the region ends at."""
        axis, side = parse_side(self.side, self.name)
        others = tuple(a for a in range(3) if a != axis)
        # Where a load can act; a thinner layer outside it belongs to the region too.
        layers = np.flatnonzero(carriers(part).any(axis=others))
        if not len(layers):
            raise InputError(f"Region '{self.name}': the part is empty.")
        plane = int(layers[-1]) + 1 if side > 0 else int(layers[0])
        edge = part.grid.nodes()[axis][plane]
        return axis, side, edge - side * (self.depth + 1e-6 * part.grid.spacing[axis])

    def _beyond(self, axis: int, side: int, limit: float, at: Points) -> Bools:
        return np.asarray(side * (at - limit) >= 0)

    def voxels(self, part: Part) -> Bools:
        """Solid voxels within the depth, at least the outermost layer."""
        axis, side, limit = self._reach(part)
        h = part.grid.spacing[axis]
        at = part.grid.centres()[axis] + 0.5 * side * h
        mask = self._beyond(axis, side, limit, at)
        shape = [1, 1, 1]
        shape[axis] = len(at)
        return np.asarray(part.solid & mask.reshape(shape))

    def nodes(self, part: Part) -> Bools:
        """Nodes of solid voxels within the depth."""
        axis, side, limit = self._reach(part)
        at = part.grid.nodes()[axis]
        shape = [1, 1, 1]
        shape[axis] = len(at)
        return np.asarray(
            solid_nodes(part.solid) & self._beyond(axis, side, limit, at).reshape(shape)
        )

    def faces(self, part: Part) -> Faces:
        """Exposed faces within the depth that look to that side."""
        axis, side, limit = self._reach(part)
        every = exposed_faces(part)
        looks = (every.axis == axis) & (every.side == side)
        return every.select(looks & self._beyond(axis, side, limit, every.centre[:, axis]))


@dataclass(frozen=True, slots=True, kw_only=True)
class PatchRegion:
    """The surface that someone sees through an outline, looking along an axis.

    Attributes
    ----------
    side : str
        Where the viewer stands: ``"z+"`` looks down on the part.
    outline : tuple of (float, float)
        Corners of a polygon in the two other axes, in the order x before y before z, mm.
    """

    name: str
    side: str
    outline: tuple[tuple[float, float], ...]

    def __post_init__(self) -> None:
        parse_side(self.side, self.name)
        if len(self.outline) < 3 or not np.isfinite(np.asarray(self.outline, float)).all():
            raise InputError(
                f"Region '{self.name}': an outline needs at least 3 finite corners in mm; "
                f"got {len(self.outline)}."
            )

    def _within(self, points: Points) -> Bools:
        """Even-odd test of the projected points."""
        axis, _ = parse_side(self.side, self.name)
        u, v = (points[:, a] for a in range(3) if a != axis)
        odd = np.zeros(len(points), dtype=bool)
        corner = np.asarray(self.outline, dtype=float)
        for (u0, v0), (u1, v1) in zip(corner, np.roll(corner, -1, axis=0), strict=True):
            crosses = (v0 > v) != (v1 > v)
            # Left of the edge, without a division that a nearly level edge would overflow.
            side = (u - u0) * (v1 - v0) - (v - v0) * (u1 - u0)
            odd ^= crosses & ((side < 0) if v1 > v0 else (side > 0))
        return odd

    def faces(self, part: Part) -> Faces:
        """Faces seen through the outline."""
        axis, side = parse_side(self.side, self.name)
        every = exposed_faces(part)
        inside = every.select(self._within(every.centre))
        return inside.select(visible_from(part, inside, axis, side))

    def voxels(self, part: Part) -> Bools:
        """The voxels behind those faces."""
        return voxels_of_faces(self.faces(part), part)

    def nodes(self, part: Part) -> Bools:
        """The corners of those faces."""
        return nodes_of_faces(self.faces(part), part)

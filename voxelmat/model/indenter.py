"""Rigid bodies that are pressed on a part along an axis: flat, ball, roller, or any mesh."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Protocol, runtime_checkable

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.mesh import TriangleMesh
from voxelmat.model.region import parse_side

__all__ = [
    "CylinderIndenter",
    "FlatPunch",
    "Indenter",
    "MeshIndenter",
    "SphereIndenter",
    "across",
    "direction",
]

Double = NDArray[np.float64]
Vector = tuple[float, float, float]

# Pairs of point and triangle looked at together, to bound memory.
_PAIRS = 1 << 21


@runtime_checkable
class Indenter(Protocol):
    """What contact asks of a rigid body.

    `position` is a point of the body, mm, before it moves; `push` is the axis and the way that it
    moves: ``"z-"`` presses down on a part from above.
    """

    @property
    def name(self) -> str:
        """What the user calls it."""

    @property
    def position(self) -> Vector:
        """Where its reference point is before it moves, mm."""

    @property
    def push(self) -> str:
        """``"x-"`` to ``"z+"``."""

    def gap(self, points: Double) -> tuple[Double, Double]:
        """How far the body has to travel until it touches each point.

        Parameters
        ----------
        points : ndarray, shape (n, 3)
            mm.

        Returns
        -------
        gap : ndarray, shape (n,)
            mm along `push`; below 0 where the body covers the point already, inf where it passes
            by.
        normal : ndarray, shape (n, 3)
            Unit normal of the body, out of it, where it will touch; `push` where it passes by.
        """


def direction(push: str) -> Double:
    """Unit vector of ``"x-"`` to ``"z+"``."""
    axis, side = parse_side(push, "indenter")
    out = np.zeros(3)
    out[axis] = side
    return out


def across(push: str) -> tuple[int, int]:
    """The two axes at right angles to `push`, in order."""
    axis, _ = parse_side(push, "indenter")
    a, b = (d for d in range(3) if d != axis)
    return a, b


@dataclass(frozen=True, slots=True, kw_only=True)
class _Rigid:
    """Base of the indenters: where it is and which way it moves."""

    name: str = "indenter"
    position: Vector = (0.0, 0.0, 0.0)
    push: str = "z-"

    def __post_init__(self) -> None:
        parse_side(self.push, self.name)
        if len(self.position) != 3 or not all(math.isfinite(x) for x in self.position):
            raise InputError(
                f"Indenter '{self.name}': a position is three finite numbers in mm; got "
                f"{self.position}."
            )

    def _local(self, points: Double) -> tuple[Double, Double, Double, Double]:
        """Height along `push` and the two offsets across it, all from `position`; normals."""
        points = np.asarray(points, dtype=np.float64)
        if points.ndim != 2 or points.shape[1] != 3:
            raise InputError(f"Points form a table of x, y, z in mm; got shape {points.shape}.")
        away = points - np.asarray(self.position)
        a, b = across(self.push)
        push = direction(self.push)
        return away @ push, away[:, a], away[:, b], np.tile(push, (len(points), 1))

    def _positive(self, value: float, what: str) -> None:
        if not (math.isfinite(value) and value > 0):
            raise InputError(f"Indenter '{self.name}': the {what} must be above 0 mm; got {value}.")


@dataclass(frozen=True, slots=True, kw_only=True)
class FlatPunch(_Rigid):
    """A flat end at `position`: round, rectangular, or a plane without end.

    Attributes
    ----------
    radius : float or None
        mm, for a round one.
    size : tuple of float or None
        Full edges along the two axes across `push`, in the order x before y before z, mm. With
        neither it is an infinite plane.
    """

    radius: float | None = None
    size: tuple[float, float] | None = None

    def __post_init__(self) -> None:
        _Rigid.__post_init__(self)
        if self.radius is not None and self.size is not None:
            raise InputError(f"Indenter '{self.name}': give a radius or a size, not both.")
        if self.radius is not None:
            self._positive(self.radius, "radius")
        for edge in self.size or ():
            self._positive(edge, "edge")

    def gap(self, points: Double) -> tuple[Double, Double]:
        """See `Indenter.gap`; points on the rim belong to the face."""
        height, u, v, normal = self._local(points)
        under = np.ones(len(height), dtype=bool)
        if self.radius is not None:
            under = np.hypot(u, v) <= self.radius * (1 + 1e-9)
        elif self.size is not None:
            half = 0.5 * np.asarray(self.size) * (1 + 1e-9)
            under = (np.abs(u) <= half[0]) & (np.abs(v) <= half[1])
        return np.where(under, height, np.inf), normal


def _round(height: Double, off: Double, radius: float) -> tuple[Double, Double, Double]:
    """Gap under a circle of `radius` whose lowest point is the origin; cosine and sine of slope."""
    sine = off / radius
    under = np.abs(sine) <= 1.0
    cosine = np.sqrt(np.where(under, 1.0 - sine**2, 0.0))
    gap = np.where(under, height + radius * (1.0 - cosine), np.inf)
    return gap, np.where(under, cosine, 1.0), np.where(under, sine, 0.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class SphereIndenter(_Rigid):
    """A ball whose foremost point is at `position`; `radius` in mm."""

    radius: float

    def __post_init__(self) -> None:
        _Rigid.__post_init__(self)
        self._positive(self.radius, "radius")

    def gap(self, points: Double) -> tuple[Double, Double]:
        """See `Indenter.gap`."""
        height, u, v, normal = self._local(points)
        off = np.hypot(u, v)
        gap, cosine, sine = _round(height, off, self.radius)
        normal *= cosine[:, None]
        a, b = across(self.push)
        share = np.divide(sine, off, out=np.zeros_like(off), where=off > 0)
        normal[:, a], normal[:, b] = share * u, share * v
        return gap, normal


@dataclass(frozen=True, slots=True, kw_only=True)
class CylinderIndenter(_Rigid):
    """A roller that lies across `push`, the middle of its foremost line at `position`.

    Attributes
    ----------
    radius : float
        mm.
    along : str
        The axis that it lies along: ``"x"``, ``"y"`` or ``"z"``, not that of `push`.
    length : float
        mm; inf for one without ends.
    """

    radius: float
    along: str
    length: float = math.inf

    def __post_init__(self) -> None:
        _Rigid.__post_init__(self)
        self._positive(self.radius, "radius")
        if not self.length > 0:
            self._positive(self.length, "length")
        if self.along not in ("x", "y", "z") or self.along == self.push[0]:
            raise InputError(
                f"Indenter '{self.name}': a roller pushed along {self.push[0]} lies along one of "
                f"the other two axes; got along={self.along!r}."
            )

    def gap(self, points: Double) -> tuple[Double, Double]:
        """See `Indenter.gap`."""
        height, u, v, normal = self._local(points)
        a, b = across(self.push)
        lies_first = "xyz"[a] == self.along
        on, off, turn = (u, v, b) if lies_first else (v, u, a)
        gap, cosine, sine = _round(height, off, self.radius)
        past = np.abs(on) > 0.5 * self.length * (1 + 1e-9)
        gap[past], cosine[past], sine[past] = np.inf, 1.0, 0.0
        normal *= cosine[:, None]
        normal[:, turn] = sine
        return gap, normal


@dataclass(frozen=True, slots=True, kw_only=True)
class MeshIndenter(_Rigid):
    """Any body: a mesh whose own origin is put at `position`.

    The gap is exact for the flat triangles: each point looks back along `push` for the foremost
    triangle over it.

    Attributes
    ----------
    mesh : TriangleMesh
        Closed, or at least without holes where it touches.
    """

    mesh: TriangleMesh

    def __post_init__(self) -> None:
        _Rigid.__post_init__(self)
        if not len(self.mesh.faces):
            raise InputError(f"Indenter '{self.name}': its mesh has no triangles.")

    def _front(self) -> tuple[Double, Double]:
        """Corners (m, 3, [across, across, along]) of triangles that face forward; unit normals."""
        a, b = across(self.push)
        axis, side = parse_side(self.push, self.name)
        corners = self.mesh.triangles
        normal = np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0])
        length = np.linalg.norm(normal, axis=1)
        front = side * normal[:, axis] > 1e-9 * length
        flat = corners[front][:, :, [a, b, axis]]
        flat[:, :, 2] *= side
        return flat, normal[front] / length[front, None]

    def gap(self, points: Double) -> tuple[Double, Double]:
        """See `Indenter.gap`."""
        height, u, v, normal = self._local(points)
        corners, normals = self._front()
        gap = np.full(len(height), np.inf)
        if not len(corners):
            return gap, normal
        step = max(1, _PAIRS // len(corners))
        for n in range(0, len(height), step):
            top, which = _foremost(corners, u[n : n + step], v[n : n + step])
            hit = which >= 0
            gap[n : n + step][hit] = height[n : n + step][hit] - top[hit]
            normal[n : n + step][hit] = normals[which[hit]]
        return gap, normal


def _foremost(corners: Double, u: Double, v: Double) -> tuple[Double, NDArray[np.intp]]:
    """Largest height of triangles over points (u, v), and whose it is; -1 for none."""
    p, q, r = corners[:, 0], corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0]
    twice = q[:, 0] * r[:, 1] - q[:, 1] * r[:, 0]
    du, dv = u[:, None] - p[:, 0], v[:, None] - p[:, 1]
    s = (du * r[:, 1] - dv * r[:, 0]) / twice
    t = (q[:, 0] * dv - q[:, 1] * du) / twice
    slack = 1e-9  # points on the edge between two triangles must not fall through
    over = (s >= -slack) & (t >= -slack) & (s + t <= 1 + slack)
    height = np.where(over, p[:, 2] + s * q[:, 2] + t * r[:, 2], -np.inf)
    which = np.argmax(height, axis=1)
    top = height[np.arange(len(u)), which]
    return top, np.where(np.isfinite(top), which, -1)

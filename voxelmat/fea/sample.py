"""Reads a result at points, along a line and over a plane, as plain data with units."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.recover import base_field, material_voxels, quantity_named, to_nodes
from voxelmat.model.result import StaticResult

__all__ = ["COMMON", "Samples", "probe", "sample_line", "sample_plane", "sample_points"]

Double = NDArray[np.float64]
Vector = tuple[float, float, float]

#: Read out where nothing else is asked for.
COMMON = ("displacement", "stress", "von Mises stress", "largest principal stretch")

# A point this near to a voxel's face (in voxels) belongs to either side.
_NEAR = 1e-6


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Samples:
    """Values at n points.

    Attributes
    ----------
    points : ndarray of float64, shape (n, 3)
        mm.
    distance : ndarray of float64, shape (n,)
        From the first point, mm.
    label : ndarray of int64, shape (n,)
        Palette entry at each point; 0 outside the material.
    material : tuple of str
        Its blend in words.
    values : mapping of str to ndarray
        By quantity, (n,) or (n, components); nan outside the material.
    units : mapping of str to str
    components : mapping of str to tuple of str
    shape : tuple of int
        ``(n,)``, or rows and columns of a plane whose points follow row by row.
    """

    points: Double
    distance: Double
    label: NDArray[np.int64]
    material: tuple[str, ...]
    values: Mapping[str, Double]
    units: Mapping[str, str]
    components: Mapping[str, tuple[str, ...]]
    shape: tuple[int, ...]

    def as_dict(self) -> dict[str, Any]:
        """Plain data for JSON: keys carry the unit, and what is not a number is None."""
        out: dict[str, Any] = {
            "shape": list(self.shape),
            "points_mm": self.points.tolist(),
            "distance_mm": self.distance.tolist(),
            "material": list(self.material),
        }
        for name, values in self.values.items():
            unit = self.units[name]
            parts = self.components[name]
            columns = values.reshape(len(values), -1).T
            for part, column in zip(parts or ("",), columns, strict=True):
                key = f"{name} {part}".rstrip() + (f", {unit}" if unit else "")
                out[key] = [v if math.isfinite(v) else None for v in column.tolist()]
        return out


def _cells(result: StaticResult, points: Double) -> tuple[NDArray[np.intp], NDArray[np.bool_]]:
    """The solid voxel of each point, on either side of a face that it lies on."""
    grid, solid = result.part.grid, result.part.solid
    at = (points - np.asarray(grid.origin)) / np.asarray(grid.spacing)
    cell = np.zeros(points.shape, dtype=np.intp)
    found = np.zeros(len(points), dtype=bool)
    for corner in range(8):
        nudge = _NEAR * (1 - 2 * np.array([corner >> a & 1 for a in range(3)]))
        tried = np.floor(at + nudge).astype(np.intp)
        inside = ((tried >= 0) & (tried < grid.shape)).all(axis=1)
        inside[inside] = solid[tuple(tried[inside].T)]
        new = inside & ~found
        cell[new] = tried[new]
        found |= new
    return cell, found


def _interpolated(nodal: Double, at: Double, cell: NDArray[np.intp]) -> Double:
    """Trilinear, in voxel `cell`, of node values ``[i, j, k, c]``; `at` in voxels."""
    local: Double = at - cell
    out = np.zeros((len(cell), nodal.shape[3]))
    for corner in range(8):
        bit = np.array([corner >> a & 1 for a in range(3)])
        weight = np.where(bit, local, 1.0 - local).prod(axis=1)
        out += weight[:, None] * nodal[tuple((cell + bit).T)]
    return out


def _recovered(
    result: StaticResult, base: NDArray[np.floating], at: Double, cell: NDArray[np.intp]
) -> Double:
    """Recovered values of a base field at points, each within its own material."""
    labels = result.part.labels[tuple(cell.T)]
    out: Double = base[tuple(cell.T)].astype(np.float64)
    shape = result.part.grid.shape
    for label in np.unique(labels):
        inside = material_voxels(result.part, int(label))
        mine = np.flatnonzero((labels == label) & inside[tuple(cell.T)])
        if not len(mine):
            continue  # a voxel less than half full keeps the value of its centre
        # Corners take in the voxels round them, and slopes the next ones.
        low = np.maximum(cell[mine].min(axis=0) - 2, 0)
        high = np.minimum(cell[mine].max(axis=0) + 3, shape)
        box = tuple(slice(a, b) for a, b in zip(low, high, strict=True))
        nodal = to_nodes(base[box], inside[box])
        out[mine] = _interpolated(nodal, at[mine] - low, cell[mine] - low)
    return out


def sample_points(
    result: StaticResult,
    points: NDArray[np.floating] | Sequence[Sequence[float]],
    quantities: Sequence[str] = COMMON,
    *,
    recovered: bool = True,
) -> Samples:
    """Read quantities at points.

    Parameters
    ----------
    result : StaticResult
    points : array_like, shape (n, 3)
        mm. A point on an interface reads the material on its upper side.
    quantities : sequence of str
        ``"displacement"`` or names of `voxelmat.fea.recover.QUANTITIES`.
    recovered : bool
        True interpolates what `voxelmat.fea.recover` finds at the nodes of the point's material;
        False takes the value of its voxel. Displacement is always interpolated.

    Returns
    -------
    Samples

    Raises
    ------
    InputError
        A quantity that is not known, points that are not finite triples.
    """
    place = np.asarray(points, dtype=np.float64)
    if place.ndim != 2 or place.shape[1] != 3 or not np.isfinite(place).all():
        raise InputError(f"Points are finite triples in mm; got an array of shape {place.shape}.")
    cell, found = _cells(result, place)
    grid = result.part.grid
    at = ((place - np.asarray(grid.origin)) / np.asarray(grid.spacing))[found]
    cell = cell[found]
    values: dict[str, Double] = {}
    units: dict[str, str] = {}
    components: dict[str, tuple[str, ...]] = {}
    for name in quantities:
        if name == "displacement":
            now = _interpolated(result.displacement, at, cell)
            units[name], components[name] = "mm", ("x", "y", "z")
        else:
            quantity = quantity_named(name)
            base = base_field(result, quantity)
            raw = _recovered(result, base, at, cell) if recovered else base[tuple(cell.T)]
            now = quantity.derive(raw.astype(np.float64))
            units[name], components[name] = quantity.unit, quantity.components
        whole = np.full((len(place), *now.shape[1:]), np.nan)
        whole[found] = now
        values[name] = whole
    label = np.zeros(len(place), dtype=np.int64)
    label[found] = result.part.labels[tuple(cell.T)]
    return Samples(
        points=place,
        distance=np.linalg.norm(place - place[:1], axis=1),
        label=label,
        material=tuple(str(result.part.palette[n]) for n in label),
        values=values,
        units=units,
        components=components,
        shape=(len(place),),
    )


def probe(
    result: StaticResult, point: Vector, quantities: Sequence[str] = COMMON
) -> dict[str, Any]:
    """Everything at one point, as plain data.

    Raises
    ------
    InputError
        Where there is no material at the point.
    """
    found = sample_points(result, [point], quantities)
    if not found.label[0]:
        raise InputError(f"There is no material at {point} mm; choose a point in the part.")
    plain = found.as_dict()
    del plain["shape"], plain["distance_mm"]
    return {key: values[0] for key, values in plain.items()}


def sample_line(
    result: StaticResult,
    start: Vector,
    end: Vector,
    count: int = 101,
    quantities: Sequence[str] = COMMON,
    *,
    recovered: bool = True,
) -> Samples:
    """Read quantities at `count` points from `start` to `end` (mm), both included."""
    if count < 2:
        raise InputError(f"A line needs at least 2 points; got {count}.")
    t = np.linspace(0.0, 1.0, count)[:, None]
    points = (1.0 - t) * np.asarray(start, float) + t * np.asarray(end, float)
    return sample_points(result, points, quantities, recovered=recovered)


def sample_plane(
    result: StaticResult,
    corner: Vector,
    along: Vector,
    up: Vector,
    counts: tuple[int, int] = (51, 51),
    quantities: Sequence[str] = COMMON,
    *,
    recovered: bool = True,
) -> Samples:
    """Read quantities over a parallelogram.

    Parameters
    ----------
    result : StaticResult
    corner : tuple of float
        mm.
    along, up : tuple of float
        Its two edges from the corner, mm.
    counts : tuple of int
        Points along and up, edges included.
    quantities, recovered
        See `sample_points`.

    Returns
    -------
    Samples
        `shape` is (points up, points along), rows from the corner up.
    """
    columns, rows = counts
    if min(counts) < 2:
        raise InputError(f"A plane needs at least 2 points each way; got {counts}.")
    if not np.linalg.norm(np.cross(along, up)) > 0:
        raise InputError(f"The edges {along} and {up} mm do not span a plane.")
    s = np.tile(np.linspace(0.0, 1.0, columns), rows)[:, None]
    t = np.repeat(np.linspace(0.0, 1.0, rows), columns)[:, None]
    points = np.asarray(corner, float) + s * np.asarray(along) + t * np.asarray(up)
    found = sample_points(result, points, quantities, recovered=recovered)
    return Samples(
        points=found.points,
        distance=found.distance,
        label=found.label,
        material=found.material,
        values=found.values,
        units=found.units,
        components=found.components,
        shape=(rows, columns),
    )

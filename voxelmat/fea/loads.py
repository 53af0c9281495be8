"""From the loads of a load case to consistent nodal forces."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.loadcase import (
    BodyForce,
    Force,
    Foundation,
    GroundSpring,
    InitialStrain,
    Load,
    Pressure,
    PressureMap,
    Temperature,
)
from voxelmat.model.part import Part
from voxelmat.model.region import Region, parse_side
from voxelmat.model.surface import Faces, visible_from

__all__ = ["NodalLoad", "corners_of_faces", "describe", "nodal_load", "shared", "spread"]

Double = NDArray[np.float64]

# A map whose force on the part is further than this from what was expected gets a caution; ours.
_EXPECTED = 0.05
# Smallest component of a true normal along the map's axis: walls steeper than this (78 degrees)
# are loaded sideways as if they had that slope.
_STEEPEST = 0.2


@dataclass(frozen=True, slots=True, kw_only=True)
class NodalLoad:
    """Forces of one load on the nodes that it touches.

    Attributes
    ----------
    name : str
        Number, kind and region.
    node : ndarray of intp, shape (n,)
        Position in the flat node array ``[k, j, i]``; a node may occur more than once.
    force : ndarray of float64, shape (n, 3)
        N along x, y, z.
    follows_mass : bool
        A body force: it alone does not make a loose piece count as loaded.
    cautions : tuple of str
    """

    name: str
    node: NDArray[np.intp]
    force: Double
    follows_mass: bool = False
    cautions: tuple[str, ...] = ()

    @property
    def resultant(self) -> tuple[float, float, float]:
        """Sum of the forces, N."""
        x, y, z = (float(math.fsum(self.force[:, d])) for d in range(3))
        return x, y, z


def describe(load: Load, number: int) -> str:
    """The name that a load goes by in messages and results."""
    kind = {
        Force: "force",
        Pressure: "pressure",
        PressureMap: "pressure map",
        BodyForce: "body force",
        GroundSpring: "spring",
        Foundation: "foundation",
        Temperature: "temperature",
        InitialStrain: "initial strain",
    }[type(load)]
    region = load.region.name if load.region is not None else "whole part"
    return f"load {number}, {kind} on '{region}'"


def _flat(
    part: Part, i: NDArray[np.intp], j: NDArray[np.intp], k: NDArray[np.intp]
) -> NDArray[np.intp]:
    nx, ny, _ = part.grid.node_shape
    return np.asarray((k * ny + j) * nx + i)


def _corners_of_voxels(part: Part, voxel: NDArray[np.intp]) -> NDArray[np.intp]:
    """Flat nodes of voxels (n, 3), shape (n, 8)."""
    i, j, k = voxel.T
    return np.stack(
        [_flat(part, i + (a & 1), j + (a >> 1 & 1), k + (a >> 2)) for a in range(8)], axis=1
    )


def corners_of_faces(part: Part, faces: Faces) -> NDArray[np.intp]:
    """Flat nodes of faces, shape (n, 4)."""
    rows = np.arange(len(faces))
    across = np.array([[1, 2], [0, 2], [0, 1]])[faces.axis]
    found = []
    for a in range(4):
        node = faces.voxel.copy()
        node[rows, faces.axis] += faces.side > 0
        node[rows, across[:, 0]] += a & 1
        node[rows, across[:, 1]] += a >> 1
        found.append(_flat(part, *node.T))
    return np.stack(found, axis=1)


def shared(node: NDArray[np.intp], value: Double) -> tuple[NDArray[np.intp], Double]:
    """Give each of m corners 1 / m of the value of its face or voxel; merge equal nodes."""
    corners = node.shape[1]
    weight = np.repeat(value, corners, axis=0) / corners
    unique, inverse = np.unique(node.ravel(), return_inverse=True)
    out = np.zeros((len(unique), *value.shape[1:]))
    np.add.at(out, inverse.ravel(), weight)
    return unique, out


def _empty(name: str, region: Region) -> InputError:
    return InputError(
        f"{name[0].upper()}{name[1:]}: region '{region.name}' holds no material of the part. "
        f"Move or enlarge the region; a load on empty space would be lost."
    )


def spread(part: Part, region: Region, name: str) -> tuple[NDArray[np.intp], Double]:
    """Nodes of a region and the share of each, summing to 1.

    Shares follow the true area of the exposed faces in the region; the filled volume of its
    voxels where it has no exposed face; and are equal where it holds nodes alone.

    Raises
    ------
    InputError
        Where the region holds none of these.
    """
    faces = region.faces(part)
    if len(faces):
        area = faces.true_area
        node, share = shared(corners_of_faces(part, faces), area if area.sum() else faces.area)
        return node, share / share.sum()
    voxel = np.argwhere(region.voxels(part))
    if len(voxel):
        fill = part.fill[tuple(voxel.T)].astype(np.float64)
        node, share = shared(_corners_of_voxels(part, voxel), fill)
        return node, share / share.sum()
    node = np.argwhere(region.nodes(part))
    if len(node):
        return _flat(part, *node.T), np.full(len(node), 1.0 / len(node))
    raise _empty(name, region)


def _force(part: Part, load: Force, name: str) -> NodalLoad:
    node, share = spread(part, load.region, name)
    return NodalLoad(name=name, node=node, force=share[:, None] * np.asarray(load.vector))


def _pressure(part: Part, load: Pressure, name: str) -> NodalLoad:
    faces = load.region.faces(part)
    if not len(faces):
        raise InputError(
            f"{name[0].upper()}{name[1:]}: region '{load.region.name}' holds no exposed surface of "
            f"the part, so a pressure there would be lost. Move or enlarge the region."
        )
    # Vector areas of a staircase sum like those of the true surface.
    node, force = shared(corners_of_faces(part, faces), -load.pressure * faces.vector_area)
    return NodalLoad(name=name, node=node, force=force)


def _map_pressure(part: Part, load: PressureMap, faces: Faces) -> Double:
    """Mean pressure over each face that looks to the map, sampled as finely as its cells."""
    axis, _ = parse_side(load.side, load.region.name)
    h = part.grid.spacing
    a, b = (d for d in range(3) if d != axis)
    count = min(8, max(1, math.ceil(max(h[a], h[b]) / min(load.cell))))
    steps = (np.arange(count) + 0.5) / count - 0.5
    total = np.zeros(len(faces))
    for s in steps:
        for t in steps:
            points = faces.centre.copy()
            points[:, a] += s * h[a]
            points[:, b] += t * h[b]
            total += load.at(points)
    return total / count**2


def _map_traction(part: Part, load: PressureMap, faces: Faces) -> Double:
    """Force on each face: pressure times the true surface over which it lies.

    Every point of the map lies over one face that looks to it; the true surface there has the
    vector area ``A n / n_axis``, so the part along the axis is exact and the rest follows the
    slope of the true normal.
    """
    axis, side = parse_side(load.side, load.region.name)
    normal = faces.normal.copy()
    normal[:, axis] = np.maximum(side * normal[:, axis], _STEEPEST)
    direction = normal / normal[:, axis, None]
    direction[:, axis] = side
    if load.acts == "along":
        direction[:, [d for d in range(3) if d != axis]] = 0.0
    return -(_map_pressure(part, load, faces) * faces.area)[:, None] * direction


def _pressure_map(part: Part, load: PressureMap, name: str) -> NodalLoad:
    axis, side = parse_side(load.side, load.region.name)
    faces = load.region.faces(part)
    faces = faces.select((faces.axis == axis) & (faces.side == side))
    faces = faces.select(visible_from(part, faces, axis, side)) if len(faces) else faces
    if not len(faces):
        raise InputError(
            f"{name[0].upper()}{name[1:]}: nothing of region '{load.region.name}' can be seen from "
            f"{load.side}. Check the region and the side."
        )
    node, force = shared(corners_of_faces(part, faces), _map_traction(part, load, faces))
    pressed = -side * float(force[:, axis].sum())
    if not np.any(force):
        raise InputError(
            f"{name[0].upper()}{name[1:]}: no cell of the map with pressure lies over the part. "
            f"Check first_cell, cell size and directions."
        )
    notes = []
    if abs(pressed - load.resultant) > _EXPECTED * load.resultant:
        notes.append(
            f"{name}: {pressed:.4g} N of the map's {load.resultant:.4g} N reach the part; the "
            f"rest lies beside it or outside the region."
        )
    expected = load.expected_force
    if expected is not None and abs(pressed - expected) > _EXPECTED * abs(expected):
        notes.append(f"{name}: presses with {pressed:.4g} N; expected_force is {expected:.4g} N.")
    return NodalLoad(name=name, node=node, force=force, cautions=tuple(notes))


def _body_force(part: Part, load: BodyForce, name: str) -> NodalLoad:
    if load.region is None:
        inside = part.solid
    else:
        inside = load.region.voxels(part)
        if not inside.any():
            raise _empty(name, load.region)
    voxel = np.argwhere(inside)
    at = tuple(voxel.T)
    density = part.palette_density()[part.labels[at]]
    mass = density * part.fill[at].astype(np.float64) * part.grid.voxel_volume
    node, share = shared(_corners_of_voxels(part, voxel), mass)
    force = share[:, None] * np.asarray(load.acceleration)
    return NodalLoad(name=name, node=node, force=force, follows_mass=True)


def nodal_load(part: Part, load: Load, name: str) -> NodalLoad:
    """Consistent nodal forces of a force, a pressure, a pressure map or a body force.

    Raises
    ------
    InputError
        Where the load's region holds nothing that could carry it.
    """
    if isinstance(load, Force):
        return _force(part, load, name)
    if isinstance(load, Pressure):
        return _pressure(part, load, name)
    if isinstance(load, PressureMap):
        return _pressure_map(part, load, name)
    if isinstance(load, BodyForce):
        return _body_force(part, load, name)
    raise InputError(f"{name} is not a force but a {type(load).__name__}.")

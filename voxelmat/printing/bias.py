"""Outlines moved against what a printer adds to them, and the shape that then comes out.

A printer with bias b puts each outline b too far outwards (mm a side, by axis of the tray). What
is sliced is the design eroded by an ellipsoid with half axes b, so that across a face with normal
n the outline moves by ``sqrt(sum (b_a n_a)^2)``; axes along which parts come out small (b < 0)
dilate it in the same way, after that. With one bias for all axes the distance is just shifted.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from voxelmat.errors import InputError
from voxelmat.io.bigpart import AnyPart
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import DISTANCE_STEPS, Part
from voxelmat.model.profile import PrintProfile
from voxelmat.printing.place import rotation_matrix

__all__ = ["as_it_comes_out", "compensated", "part_bias", "with_margin"]

Floats = NDArray[np.float32]
Triple = tuple[float, float, float]
_MOST_VOXELS = 6  # the distance is known over 127/16 of a voxel


def part_bias(profile: PrintProfile, rotation: Sequence[Sequence[int]]) -> Triple:
    """The printer's bias along the axes of a part that stands turned on the tray, mm."""
    x, y, z = np.abs(np.array(rotation)).T @ np.array(profile.bias)
    return (float(x), float(y), float(z))


def compensated(part: AnyPart, profile: PrintProfile, orientation: Sequence[str] = ()) -> AnyPart:
    """The part to slice, so that what the printer makes of it has the outline of `part`.

    Parameters
    ----------
    part : Part or StoredPart
        The design. Needs a signed distance in memory where the printer has a bias.
    profile : PrintProfile
    orientation : sequence of str
        Turns on the tray, as for `voxelmat.printing.job.placed`.

    Returns
    -------
    Part
        `part` itself where the printer has no bias. Else on a grid with a margin, its distance
        offset, its occupancy moved along, and with a bias below 0 its labels carried outwards.

    Raises
    ------
    InputError
        If the part has no signed distance in memory, or the bias is more than 6 voxels.
    """
    bias = part_bias(profile, rotation_matrix(orientation).tolist())
    if not any(bias):
        return part
    part = _checked(part, bias)
    outwards = max(0.0, *(-b for b in bias))
    part = with_margin(part, [int(np.ceil(outwards / h)) + 1 for h in part.grid.spacing])
    distance = part.distance
    assert distance is not None  # noqa: S101 - checked
    before = distance.astype(np.float32)
    after = _moved(before, part.grid, bias)
    labels, occupancy = part.labels, part.occupancy
    inside = _share(after)
    free = (labels == 0) & (inside > 0)
    if outwards and free.any():
        labels = _carried(part, free)
    if occupancy is not None:
        change = inside - _share(before)
        moved = np.clip(occupancy + np.rint(change), 0, 255)
        # What the outline has left wholly, or taken in wholly, keeps no rest of another share.
        ends = (change != 0) & ((inside == 0) | (inside == 255))
        moved[ends] = inside[ends]
        bought = ~part.printed_labels()[part.labels] & (part.labels > 0)
        moved[bought] = occupancy[bought]
        moved[free] = np.rint(inside[free])
        occupancy = np.where(labels > 0, moved, 0).astype(np.uint8)
    steps = np.clip(np.rint(after), -127, 127).astype(np.int8)
    return part.replace(labels=labels, distance=steps, occupancy=occupancy)


def _checked(part: AnyPart, bias: Triple) -> Part:
    if not isinstance(part, Part) or part.distance is None:
        raise InputError(
            f"The profile has a bias of {', '.join(f'{b:g}' for b in bias)} mm, but part "
            f"'{part.name}' has no signed distance in memory by which its outline could be moved "
            "against it. Make the part from meshes, or set bias_mm to zero.",
            key="bias_mm",
        )
    limit = _MOST_VOXELS * min(part.grid.spacing)
    if max(map(abs, bias)) > limit:
        raise InputError(
            f"A bias of {max(map(abs, bias)):g} mm is more than {_MOST_VOXELS} voxels of the "
            f"design ({limit:g} mm), over which its distance is not known. Take larger voxels.",
            key="bias_mm",
        )
    return part


def _share(steps: Floats) -> Floats:
    """Share of a voxel inside an outline that passes its centre at a distance, 0 to 255."""
    share: Floats = np.clip(127.5 - 255 / DISTANCE_STEPS * steps, 0, 255)
    return share


def with_margin(part: Part, voxels: Sequence[int]) -> Part:
    """The part on a grid with empty voxels all round, the distance carried on."""
    grid = part.grid
    pads = [(n, n) for n in voxels]
    unit = DISTANCE_STEPS / min(grid.spacing)
    distance = np.asarray(part.distance, dtype=np.float32)
    beyond = []  # of each axis: how far outside the grid's last centres, in steps
    for axis, n in enumerate(voxels):
        shape = [-1 if a == axis else 1 for a in range(3)]
        step = grid.spacing[axis] * unit
        m = grid.shape[axis]
        deep = np.minimum(np.arange(m), np.arange(m)[::-1]) + 0.5
        # The grid ends the part: what is printed ends at its faces.
        distance = np.maximum(distance, (-deep * step).astype(np.float32).reshape(shape))
        out = np.maximum(np.arange(-n, m + n) - (m - 1), -np.arange(-n, m + n)).clip(0) * step
        beyond.append(out.astype(np.float32).reshape(shape))
    edge = np.pad(distance, pads, "edge")
    inside = np.sqrt(sum(np.where(r > 0, np.maximum(r + edge, 0), 0) ** 2 for r in beyond))
    outside = edge + np.sqrt(sum(r**2 for r in beyond))
    past = sum((r > 0).astype(np.int8) for r in beyond) > 0
    distance = np.where(past, np.where(edge > 0, outside, inside), edge)
    origin = [o - n * h for o, n, h in zip(grid.origin, voxels, grid.spacing, strict=True)]
    size = [m + 2 * n for m, n in zip(grid.shape, voxels, strict=True)]
    return part.replace(
        grid=VoxelGrid(
            shape=(size[0], size[1], size[2]),
            spacing=grid.spacing,
            origin=(origin[0], origin[1], origin[2]),
        ),
        labels=np.pad(part.labels, pads),
        distance=np.clip(np.rint(distance), -127, 127).astype(np.int8),
        occupancy=None if part.occupancy is None else np.pad(part.occupancy, pads),
        bodies={name: np.pad(mask, pads) for name, mask in part.bodies.items()},
    )


def _moved(distance: Floats, grid: VoxelGrid, bias: Triple) -> Floats:
    """The distance after the outline is moved: inwards for a bias above 0."""
    unit = DISTANCE_STEPS / min(grid.spacing)
    if len(set(bias)) == 1:
        return np.asarray(distance + np.float32(bias[0] * unit))
    after = _swept(distance, grid, [max(b, 0.0) for b in bias], np.maximum)
    return _swept(after, grid, [max(-b, 0.0) for b in bias], np.minimum)


def _swept(
    distance: Floats,
    grid: VoxelGrid,
    reach: Sequence[float],
    keep: Callable[[Floats, Floats], Floats],
) -> Floats:
    """Largest or least distance over an ellipsoid of half axes `reach`, mm, round each voxel."""
    if not any(reach):
        return distance
    band = np.abs(distance) < (max(reach) + 2 * max(grid.spacing)) * (
        DISTANCE_STEPS / min(grid.spacing)
    )
    at = np.stack(np.nonzero(band)).astype(np.float32)
    half = np.array(reach, dtype=np.float32) / np.array(grid.spacing, dtype=np.float32)
    found = distance[band]
    for direction in _directions():
        step = (half * direction)[:, None]
        found = keep(found, ndimage.map_coordinates(distance, at + step, order=1, mode="nearest"))
    out = distance.copy()
    out[band] = found
    return out


def _directions() -> NDArray[np.float32]:
    """Unit vectors: both ways along each axis, and 60 evenly spread (a golden spiral)."""
    k = np.arange(60) + 0.5
    z, turn = 1 - k / 30, np.pi * (1 + 5**0.5) * k
    ring = np.sqrt(1 - z * z)
    spread = np.stack([ring * np.cos(turn), ring * np.sin(turn), z], axis=1)
    return np.concatenate([np.eye(3), -np.eye(3), spread]).astype(np.float32)


def _carried(part: Part, free: NDArray[np.bool_]) -> NDArray[np.uint16]:
    """Labels with the voxels of `free` given that of the nearest printed voxel."""
    printed = part.printed_labels()[part.labels] & (part.labels > 0)
    nearest = ndimage.distance_transform_edt(
        ~printed, sampling=part.grid.spacing, return_distances=False, return_indices=True
    )
    labels = np.array(part.labels, order="F")
    labels[free] = part.labels[tuple(n[free] for n in nearest)]
    return labels


def as_it_comes_out(
    filled: Sequence[Floats], part: Part, bias: Triple
) -> tuple[tuple[Floats, ...], NDArray[np.uint8]]:
    """What a printer with a bias makes of averaged droplets: the outline of the design again.

    Parameters
    ----------
    filled : sequence of ndarray of float32
        Share of each voxel of the design's grid that each resin fills in the stack.
    part : Part
        The design.
    bias : tuple of float
        Along the axes of the part, mm.

    Returns
    -------
    tuple of ndarray of float32
        Fractions of each resin, sum 1 where there is material: as averaged, in voxels without
        droplets as in the nearest one that has some.
    ndarray of uint8
        Occupancy of the design where droplets lie within the bias and one voxel; else 0, for
        what the stack has lost does not come back.
    """
    printed = part.printed_labels()[part.labels] & (part.labels > 0)
    wanted = np.full(part.grid.shape, 255, np.uint8)
    if part.occupancy is not None:
        wanted = np.array(part.occupancy)
    elif part.distance is not None:
        wanted = np.rint(_share(part.distance.astype(np.float32))).astype(np.uint8)
    total = np.asarray(sum(filled))
    laid = total > 0.5 / 255
    away, nearest = ndimage.distance_transform_edt(
        ~laid, sampling=part.grid.spacing, return_indices=True
    )
    reach = max(map(abs, bias)) + float(np.linalg.norm(part.grid.spacing))
    occupancy = np.where(printed & (away <= reach), wanted, 0).astype(np.uint8)
    at = tuple(nearest)
    safe = np.where(laid, total, 1)
    fractions = tuple(np.asfortranarray((f / safe)[at], dtype=np.float32) for f in filled)
    return fractions, np.asfortranarray(occupancy)

"""Safe repairs of a design: specks removed, chosen drains cut, thin features thickened.

Nothing is changed in place: each repair gives a new part. A repair that would touch a protected
surface or a bought-in body, or that cannot be told to be safe, is refused with the reason.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from voxelmat.errors import InputError
from voxelmat.model.finding import Finding
from voxelmat.model.fix import DrainHole, FixResult, FixStep, Refusal
from voxelmat.model.part import DISTANCE_STEPS, Part
from voxelmat.model.profile import PrintProfile

__all__ = ["FIXES", "SPECK_MM3", "fix_part", "named_fixes"]

Bools = NDArray[np.bool_]
Floats = NDArray[np.float32]
#: Finding's code to the repair that may help.
FIXES = {
    "specks": "remove speck",
    "floating piece": "remove speck",
    "separate pieces": "remove speck",
    "sealed cavity": "drain",
    "thin wall or strut": "thicken",
    "wall under minimum": "thicken",
    "strut under minimum": "thicken",
}
#: A loose piece up to this volume is a speck; a larger one may be meant. Ours.
SPECK_MM3 = 1.0


class _Refused(Exception):
    """Why a repair is not made."""


def named_fixes(findings: Sequence[Finding]) -> list[Finding]:
    """The findings, each with the name of the repair that may help."""
    return [dataclasses.replace(f, fix=FIXES.get(f.code, "")) for f in findings]


def fix_part(
    part: Part,
    findings: Sequence[Finding],
    profile: PrintProfile,
    *,
    protected: Bools | None = None,
    drains: Sequence[DrainHole] = (),
) -> FixResult:
    """Repair a design as far as that is safe.

    Parameters
    ----------
    part : Part
        With a signed distance.
    findings : sequence of Finding
        Of a preflight of its stack.
    profile : PrintProfile
        Its smallest sizes are what is thickened and drilled to.
    protected : ndarray of bool, ``[i, j, k]``, optional
        Voxels that stay as they are, and whose outline stays where it is.
    drains : sequence of DrainHole
        Where holes may be cut; no other place is drilled.

    Raises
    ------
    InputError
        If the part has no signed distance.
    """
    if part.distance is None:
        raise InputError(
            "This part came without a signed distance, so its outline cannot be offset. Voxelise "
            "it from its mesh."
        )
    keep = np.zeros(part.grid.shape, dtype=np.bool_) if protected is None else protected
    work, steps, refused = part, [], []
    holes = list(drains)
    for finding in findings:
        name = FIXES.get(finding.code)
        if name is None or finding.place_mm is None:
            continue
        try:
            if name == "remove speck":
                new, message = _without_piece(work, finding.place_mm)
            elif name == "thicken":
                new, message = _thickened(work, finding, profile)
            else:
                new, message = _drained(work, finding.place_mm, holes, profile)
            steps.append(_step(work, new, keep, name, message, finding.place_mm))
            work = new
        except _Refused as reason:
            refused.append(Refusal(finding=finding, reason=str(reason)))
    return FixResult(before=part, part=work, steps=tuple(steps), refused=tuple(refused))


def _fill(part: Part) -> Floats:
    if part.occupancy is None:
        return np.asarray(255 * (part.labels > 0), dtype=np.float32)
    return np.asarray(part.occupancy, dtype=np.float32)


def _step(
    old: Part, new: Part, keep: Bools, name: str, message: str, place: tuple[float, float, float]
) -> FixStep:
    """What a repair changed; refused where that is protected or bought in."""
    change = _fill(new) - _fill(old)
    changed = np.asarray((change != 0) | (old.labels != new.labels))
    assert old.distance is not None  # noqa: S101 - checked by `fix_part`
    assert new.distance is not None  # noqa: S101 - as above
    outline = np.minimum(np.abs(old.distance), np.abs(new.distance)) < DISTANCE_STEPS
    if (((old.distance != new.distance) & outline | changed) & keep).any():
        raise _Refused("it would change a protected surface.")
    bought = ~old.printed_labels()[old.labels] & (old.labels > 0)
    if (changed & ndimage.binary_dilation(bought)).any():
        raise _Refused("it would change a bought-in body or the gap round it.")
    if not changed.any():
        raise _Refused("the design has nothing there that could be changed.")
    volume = old.grid.voxel_volume / 255
    return FixStep(
        name=name,
        message=message,
        place_mm=place,
        added_mm3=float(change[change > 0].sum()) * volume,
        removed_mm3=float(-change[change < 0].sum()) * volume,
        voxels=int(changed.sum()),
    )


def _redrawn(part: Part, distance: Floats) -> Part:
    """The part with another signed distance (1/16 of the smallest spacing, unrounded)."""
    assert part.distance is not None  # noqa: S101 - checked by `fix_part`
    before = part.distance.astype(np.float32)
    steps = np.clip(np.rint(distance), -127, 127)
    moved = steps != before

    def share(d: Floats) -> Floats:
        return np.asarray(np.clip(127.5 - 255 / DISTANCE_STEPS * d, 0, 255), dtype=np.float32)

    fill = np.where(moved, _fill(part) + share(distance) - share(before), _fill(part))
    fill = np.clip(np.rint(fill), 0, 255)
    labels = part.labels
    free = (labels == 0) & (fill > 0)
    if free.any():
        known = part.printed_labels()[labels]
        at = ndimage.distance_transform_edt(
            ~known, sampling=part.grid.spacing, return_distances=False, return_indices=True
        )
        labels = np.where(free, labels[tuple(at)], labels)
    labels = np.where(moved & (fill == 0), 0, labels)
    return part.replace(
        labels=labels.astype(np.uint16),
        distance=steps.astype(np.int8),
        occupancy=np.where(labels > 0, fill, 0).astype(np.uint8),
    )


def _voxel(part: Part, place: tuple[float, float, float]) -> tuple[int, int, int]:
    index = (np.array(place) - np.array(part.grid.origin)) / np.array(part.grid.spacing)
    i, j, k = np.clip(np.floor(index).astype(int), 0, np.array(part.grid.shape) - 1)
    return int(i), int(j), int(k)


def _near(part: Part, place: tuple[float, float, float], wanted: Bools) -> tuple[int, int, int]:
    """The wanted voxel nearest to a place, at most two voxels off."""
    at = np.array(_voxel(part, place))
    found = np.argwhere(wanted)
    if not len(found):
        raise _Refused("the design has nothing of the kind there; it arises in the raster.")
    off = np.abs(found - at).max(axis=1)
    if off.min() > 2:
        raise _Refused("the design has nothing of the kind there; it arises in the raster.")
    i, j, k = found[int(off.argmin())]
    return int(i), int(j), int(k)


# ---------------------------------------------------------------- the three repairs
def _without_piece(part: Part, place: tuple[float, float, float]) -> tuple[Part, str]:
    """Remove the loose piece at a place."""
    assert part.distance is not None  # noqa: S101 - checked by `fix_part`
    solid = (part.distance < 0) & part.printed_labels()[part.labels]
    pieces, count = ndimage.label(solid)
    size = np.bincount(pieces.ravel(), minlength=count + 1)
    size[0] = 0
    loose = (pieces > 0) & (pieces != size.argmax())
    number = int(pieces[_near(part, place, loose)])
    volume = size[number] * part.grid.voxel_volume
    if volume > SPECK_MM3:
        raise _Refused(
            f"the piece has {volume:.3g} mm^3, more than the {SPECK_MM3:g} mm^3 of a speck; "
            "remove or join it in the design."
        )
    mine = pieces == number
    for body, mask in part.bodies.items():
        if mask.any() and (mask & solid & ~mine).sum() == 0:
            raise _Refused(f"the piece is all of body '{body}'.")
    step = DISTANCE_STEPS / min(part.grid.spacing)
    rest = solid & ~mine
    nearest, at = ndimage.distance_transform_edt(
        ~solid, sampling=part.grid.spacing, return_indices=True
    )
    del nearest
    owned = mine[tuple(at)] | mine
    gone = ndimage.distance_transform_edt(~rest, sampling=part.grid.spacing) * step
    far = np.maximum(gone - 0.5 * DISTANCE_STEPS, DISTANCE_STEPS)
    distance = np.where(owned, np.maximum(part.distance, far), part.distance)
    return _redrawn(part, distance.astype(np.float32)), f"a loose piece of {volume:.3g} mm^3"


def _thickened(part: Part, finding: Finding, profile: PrintProfile) -> tuple[Part, str]:
    """Offset the outline of a thin feature outwards until it has the least size."""
    assert part.distance is not None  # noqa: S101 - checked by `fix_part`
    assert finding.place_mm is not None  # noqa: S101 - as above
    limit = finding.limit if finding.limit is not None else profile.minimum.wall
    to_mm = min(part.grid.spacing) / DISTANCE_STEPS
    depth = -part.distance.astype(np.float32) * to_mm
    solid = (depth > 0) & part.printed_labels()[part.labels]
    # Thin is what no ball of the least size reaches: the centres of such balls lie so deep, less
    # the quarter voxel that the sampling of the depth at voxel centres loses.
    slack = 0.25 * max(part.grid.spacing)
    core = depth >= 0.5 * limit - slack
    reach = ndimage.distance_transform_edt(~core, sampling=part.grid.spacing)
    thin = solid & (reach > 0.75 * limit)
    if not core.any():
        thin = solid
    pieces, _ = ndimage.label(thin, structure=np.ones((3, 3, 3)))
    zone = pieces == pieces[_near(part, finding.place_mm, thin)]
    # The depth is known at voxel centres, which may lie off the middle by half a voxel.
    thickness = 2 * float(depth[zone].max()) + 0.5 * min(part.grid.spacing)
    if finding.code.endswith("under minimum") and finding.value is not None:
        thickness = finding.value
    grow = 0.5 * (limit - thickness) + slack
    if grow <= 0:
        raise _Refused(f"the design is {thickness:.3g} mm thick there, which is enough.")
    if grow > 0.5 * limit:
        raise _Refused(
            f"it is only {thickness:.3g} mm thick; to reach {limit:.3g} mm would change the shape "
            "by more than its own size. Change the design."
        )
    away = ndimage.distance_transform_edt(~zone, sampling=part.grid.spacing)
    share = np.clip(1.5 - 2 * away / limit, 0, 1)  # all within a quarter of the least size
    distance = part.distance.astype(np.float32) - (grow / to_mm) * share.astype(np.float32)
    new = _redrawn(part, distance)
    rim = np.ones(part.grid.shape, dtype=np.bool_)
    rim[1:-1, 1:-1, 1:-1] = False
    if ((_fill(new) > _fill(part)) & rim).any():
        raise _Refused("it would grow out of the grid; give the design a wider margin.")
    joined = ndimage.label(~(_fill(new) > 127))[1]
    if joined != ndimage.label(~(_fill(part) > 127))[1]:
        raise _Refused("it would close a gap or a hole.")
    return new, f"{1000 * grow:.0f} um outwards on all sides"


def _drained(
    part: Part,
    place: tuple[float, float, float],
    holes: list[DrainHole],
    profile: PrintProfile,
) -> tuple[Part, str]:
    """Cut a chosen hole from the cavity at a place."""
    assert part.distance is not None  # noqa: S101 - checked by `fix_part`
    rooms, _ = ndimage.label(part.distance >= 0)
    outside = _outside(rooms)
    number = int(rooms[_near(part, place, (rooms > 0) & ~np.isin(rooms, outside))])
    least = max(profile.minimum.hole, profile.minimum.gap)
    for hole in holes:
        if int(rooms[_voxel(part, hole.point_mm)]) != number:
            continue
        diameter = least if hole.diameter_mm is None else hole.diameter_mm
        if diameter < least:
            raise _Refused(
                f"the hole of {diameter:g} mm is under the {least:g} mm that this printer holds."
            )
        centres = np.meshgrid(*part.grid.centres(), indexing="ij", sparse=True)
        way = np.array(hole.direction) / np.linalg.norm(hole.direction)
        off = [c - p for c, p in zip(centres, hole.point_mm, strict=True)]
        along = sum(o * w for o, w in zip(off, way, strict=True))
        square = sum(o**2 for o in off) - np.where(along > 0, along, 0) ** 2
        inside = 0.5 * diameter - np.sqrt(np.maximum(square, 0))
        step = DISTANCE_STEPS / min(part.grid.spacing)
        distance = np.maximum(part.distance, np.clip(inside * step, -127, 127))
        new = _redrawn(part, distance.astype(np.float32))
        after, _ = ndimage.label(np.asarray(new.distance) >= 0)
        if int(after[_voxel(part, hole.point_mm)]) not in _outside(after):
            raise _Refused("the chosen hole does not come out of the part.")
        return new, f"a hole of {diameter:g} mm from the cavity outwards"
    raise _Refused(
        "no drain was chosen for it; name a point in the cavity and a direction, such as "
        f"{', '.join(f'{v:.3g}' for v in place)} and "
        f"{_shortest(part, rooms == number, np.isin(rooms, outside))}."
    )


def _outside(rooms: NDArray[np.signedinteger[Any]]) -> list[int]:
    """Rooms that reach the rim of the grid."""
    faces = [np.unique(np.take(rooms, e, axis=a)) for a in range(3) for e in (0, -1)]
    return [int(n) for n in np.unique(np.concatenate(faces)) if n > 0]


def _shortest(part: Part, room: Bools, free: Bools) -> str:
    """The direction along an axis in which the wall round a cavity is thinnest, in words."""
    best, words = np.inf, "0, 0, 1"
    middle = np.argwhere(room)[int(room.sum()) // 2]
    for axis in range(3):
        for sign in (1, -1):
            index: list[object] = list(middle)
            index[axis] = slice(middle[axis], None) if sign > 0 else slice(middle[axis], None, -1)
            line = free[tuple(index)]  # type: ignore[arg-type]
            steps = float(line.argmax()) * part.grid.spacing[axis] if line.any() else np.inf
            if steps < best:
                best = steps
                words = ", ".join(str(sign if a == axis else 0) for a in range(3))
    return words

"""From the regions that a design describes to regions that a part can be asked about."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from functools import lru_cache
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.io.mesh import read_mesh
from voxelmat.model.blend import Blend
from voxelmat.model.design import Design, RegionEntry
from voxelmat.model.part import Part
from voxelmat.model.region import (
    BodyRegion,
    Box,
    Cylinder,
    FaceRegion,
    HalfSpace,
    LabelRegion,
    MeshRegion,
    PatchRegion,
    Region,
    Sphere,
)
from voxelmat.model.region_faces import SurfaceRegion
from voxelmat.shape.grow import Grown, grow
from voxelmat.shape.inside import contains
from voxelmat.shape.repair import mend

__all__ = [
    "AREA_CHANGE",
    "at_key",
    "box_words",
    "grown_face",
    "region_for",
    "regions_of",
    "whole_part",
]

#: Fractions of a palette entry that differ by less count as the blend that is asked for.
_SAME_BLEND = 1e-3
#: A grown face whose area changed by more than this share is shown and not used; ours.
AREA_CHANGE = 0.05


def whole_part() -> Box:
    """The region that holds everything, for what names no region."""
    everywhere = math.inf
    return Box(
        name="whole part",
        low=(-everywhere, -everywhere, -everywhere),
        high=(everywhere, everywhere, everywhere),
    )


@contextmanager
def at_key(design: Design, key: str) -> Iterator[None]:
    """Give an `InputError` from inside the design's file and the key, where it has none."""
    try:
        yield
    except InputError as error:
        if error.file is not None:
            raise
        raise InputError(error.message, file=str(design.path or "design"), key=key) from error


def regions_of(design: Design, part: Part) -> dict[str, Region]:
    """Every region by name, each body under its own name too; none is empty on `part`.

    Raises
    ------
    InputError
        Naming file and key, if a region cannot be made or holds nothing of the part.
    """
    found: dict[str, Region] = {}
    for i, entry in enumerate(design.regions):
        with at_key(design, f"region[{i}]"):
            region = region_for(entry, design, part)
            _check_not_empty(region, entry.kind, part)
            found[entry.name] = region
    for body in design.bodies:
        found[body.name] = BodyRegion(name=body.name, body=body.name)
    return found


def box_words(part: Part) -> str:
    """Where the part's material lies, for messages."""
    solid = part.solid
    if not solid.any():
        return "the part is empty"
    spans = []
    for axis, nodes in enumerate(part.grid.nodes()):
        others = tuple(a for a in range(3) if a != axis)
        layers = np.flatnonzero(solid.any(axis=others))
        low, high = nodes[layers[0]], nodes[layers[-1] + 1]
        spans.append(f"{'xyz'[axis]} {low:.4g} to {high:.4g}")
    return f"the part spans {', '.join(spans)} mm"


def _check_not_empty(region: Region, kind: str, part: Part) -> None:
    if region.nodes(part).any():
        return
    raise InputError(
        f"Region '{region.name}' ({kind}) holds nothing of the part: {box_words(part)}. Move or "
        "enlarge the region."
    )


def region_for(entry: RegionEntry, design: Design, part: Part) -> Region:
    """One region; `part` gives the palette that a label region asks for."""
    name, given = entry.name, entry.settings
    three = {k: (float(v[0]), float(v[1]), float(v[2])) for k, v in given.items() if _is_point(v)}
    match entry.kind:
        case "box":
            return Box(name=name, low=three["low_mm"], high=three["high_mm"])
        case "sphere":
            return Sphere(name=name, centre=three["centre_mm"], radius=given["radius_mm"])
        case "cylinder":
            return Cylinder(
                name=name,
                start=three["start_mm"],
                end=three["end_mm"],
                radius=given["radius_mm"],
                inner_radius=given.get("inner_radius_mm", 0.0),
            )
        case "half-space":
            return HalfSpace(name=name, point=three["point_mm"], normal=three["normal"])
        case "face":
            return FaceRegion(name=name, side=given["side"], depth=given.get("depth_mm", 0.0))
        case "patch":
            outline = tuple((float(u), float(v)) for u, v in given["outline_mm"])
            return PatchRegion(name=name, side=given["side"], outline=outline)
        case "body":
            return BodyRegion(name=name, body=given["body"])
        case "label":
            return _label_region(name, given, part)
        case "mesh":
            return _mesh_region(name, given, design)
        case "grown":
            return _grown_region(entry, design)
    raise InputError(f"Region '{name}' has kind {entry.kind!r}, which is not known.")


def _is_point(value: object) -> bool:
    return isinstance(value, list) and len(value) == 3 and not isinstance(value[0], list)


def _label_region(name: str, given: Mapping[str, object], part: Part) -> LabelRegion:
    labels = given.get("labels")
    if isinstance(labels, list):
        top = len(part.palette) - 1
        if max(labels) > top:
            raise InputError(
                f"Region '{name}' asks for label {max(labels)}; the part's palette ends at {top}."
            )
        return LabelRegion(name=name, labels=tuple(labels))
    parts = given["blend"]
    wanted = Blend.of(parts)  # type: ignore[arg-type]
    names = {n for b in part.palette for n, _ in b.fractions} | {n for n, _ in wanted.fractions}
    close = tuple(
        i
        for i, blend in enumerate(part.palette)
        if i and all(abs(blend.fraction(n) - wanted.fraction(n)) <= _SAME_BLEND for n in names)
    )
    if not close:
        there = "; ".join(str(b) for b in part.palette[1:9])
        raise InputError(
            f"Region '{name}' asks for the blend {wanted}, which the part does not have. It has: "
            f"{there}{'; ...' if len(part.palette) > 9 else ''}."
        )
    return LabelRegion(name=name, labels=close)


def _grown_region(entry: RegionEntry, design: Design) -> SurfaceRegion:
    """The face that was chosen on a body's mesh, found again on the mesh as it is now."""
    given = entry.settings
    found = grown_face(design, given["body"], given["seed_mm"], given["angle_deg"])
    known = given.get("area_mm2")
    if known is not None and abs(found.area_mm2 - known) > AREA_CHANGE * known:
        raise InputError(
            f"Region '{entry.name}' had {known:.4g} mm2 when it was chosen and has "
            f"{found.area_mm2:.4g} mm2 on the mesh as it is now. Look at it: if it is right, set "
            f"area_mm2 = {found.area_mm2:.6g}; else choose the face again."
        )
    return SurfaceRegion(name=entry.name, picks=found.holds)


def grown_face(design: Design, body: str, seed_mm: Sequence[float], angle_deg: float) -> Grown:
    """The face of a body's mesh at a point, grown up to an angle; see `voxelmat.shape.grow`."""
    owner = next(b for b in design.bodies if b.name == body)
    path = design.file(owner.mesh)
    x, y, z = (float(v) for v in seed_mm)
    stamp = path.stat().st_mtime_ns if path.is_file() else 0
    return _grown(path, stamp, owner.unit, owner.object_name, (x, y, z), float(angle_deg))


@lru_cache(maxsize=64)
def _grown(
    path: Path,
    stamp: int,
    unit: str | None,
    object_name: str | None,
    seed: tuple[float, float, float],
    angle: float,
) -> Grown:
    del stamp  # a file that was written anew is read anew
    return grow(read_mesh(path, unit, object_name=object_name)[0], seed, angle)


def _mesh_region(name: str, given: Mapping[str, str], design: Design) -> MeshRegion:
    meshes = [mend(mesh)[0] for mesh in read_mesh(design.file(given["mesh"]), given.get("unit"))]

    def inside(points: NDArray[np.float64]) -> NDArray[np.bool_]:
        held = np.zeros(len(points), dtype=bool)
        for mesh in meshes:
            held |= contains(mesh, points)
        return held

    return MeshRegion(name=name, inside=inside)

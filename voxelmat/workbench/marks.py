"""What is drawn onto a part: arrows of loads, stripes on supports, a region pointed out."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from voxelmat.model.loadcase import (
    BodyForce,
    Force,
    Foundation,
    GroundSpring,
    Load,
    LoadCase,
    Pressure,
    PressureMap,
    Support,
)
from voxelmat.model.plate import Plate
from voxelmat.model.region import Region, parse_side
from voxelmat.model.surface import Faces, visible_from
from voxelmat.units import quantity
from voxelmat.workbench.captions import Line
from voxelmat.workbench.solid import Solid, Surface, face_keys

__all__ = ["Arrow", "Marks", "Tint", "marks_of", "tinted"]

Double = NDArray[np.float64]
_LOAD, _MOTION, _SUPPORT, _SPRING, _POINTED = "#D55E00", "#009E73", "#222222", "#0072B2", "#CC79A7"
_RING = "#99226B"  # a ring must stand out where a face of _POINTED would do
_ARROWS = 14  # of one load at most
_LONGEST = 0.12  # of the diagonal of the part
_SHORTEST = 0.25  # of the longest arrow, so that a small load is still seen


@dataclass(frozen=True, slots=True, kw_only=True)
class Arrow:
    """From `tail` to `tip`, mm, as drawn; `place` is where it acts; `colour` is ``#rrggbb``."""

    place: tuple[float, float, float]
    tail: tuple[float, float, float]
    tip: tuple[float, float, float]
    colour: str


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Tint:
    """A colour laid over some faces, or over stripes of them."""

    keys: NDArray[np.int64]
    colour: str
    striped: bool


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Marks:
    """All that is drawn onto one part.

    Attributes
    ----------
    arrows : tuple of Arrow
    tints : tuple of Tint
    lines : tuple of Line
        Places that are seen even where something lies before them.
    notes : tuple of str
        What the arrows and stripes mean, with the scale of each kind of arrow.
    """

    arrows: tuple[Arrow, ...] = ()
    tints: tuple[Tint, ...] = ()
    lines: tuple[Line, ...] = ()
    notes: tuple[str, ...] = ()


@dataclass(slots=True)
class _Push:
    """Arrows of one kind before their lengths are known: where, which way, how much."""

    unit: str
    colour: str
    places: list[Double] = field(default_factory=list)
    vectors: list[Double] = field(default_factory=list)
    normals: list[Double | None] = field(default_factory=list)

    def add(self, places: Double, vectors: Double, normals: Double | None) -> None:
        for n, (place, vector) in enumerate(zip(places, vectors, strict=True)):
            if np.linalg.norm(vector) > 0:
                self.places.append(place)
                self.vectors.append(vector)
                self.normals.append(None if normals is None else normals[n])


def marks_of(solid: Solid, case: LoadCase | None = None, pointed: Region | None = None) -> Marks:
    """Marks for the loads and supports of a case, and for a region that is pointed out.

    Parameters
    ----------
    solid : Solid
    case : LoadCase, optional
    pointed : Region, optional
    """
    pushes = {
        "N": _Push("N", _LOAD),
        "MPa": _Push("MPa", _LOAD),
        "m/s²": _Push("m/s²", _LOAD),
        "mm": _Push("mm", _MOTION),
    }
    tints: list[Tint] = []
    notes: list[str] = []
    if case is not None:
        for support in case.supports:
            _support(solid, support, pushes, tints)
        for load in case.loads:
            _load(solid, load, pushes, tints)
        for plate in case.plates:
            _plate(solid, plate, pushes, tints)
        notes += _stripe_words(case)
    arrows: list[Arrow] = []
    for push in pushes.values():
        made, words = _arrows(solid, push)
        arrows += made
        notes += words
    lines = []
    if pointed is not None:
        faces = pointed.faces(solid.part)
        tints.append(_tint(solid, faces, _POINTED, striped=False))
        if len(faces):
            places = solid.moved(faces.centre[_spread(faces, 1)])
            lines.append(Line(places=(_triple(places[0]),), text=pointed.name, colour=_RING))
        notes.append(f"region '{pointed.name}' in purple")
    return Marks(arrows=tuple(arrows), tints=tuple(tints), lines=tuple(lines), notes=tuple(notes))


def _stripe_words(case: LoadCase) -> list[str]:
    held = [s.region.name for s in case.supports]
    held += [p.region.name for p in case.plates if any(v is not None for v in p.given)]
    sprung = [x.region.name for x in case.loads if isinstance(x, GroundSpring | Foundation)]
    words = []
    if held:
        words.append(f"held (dark stripes): {', '.join(dict.fromkeys(held))}")
    if sprung:
        words.append(f"on springs (blue stripes): {', '.join(dict.fromkeys(sprung))}")
    return words


def _tint(solid: Solid, faces: Faces, colour: str, *, striped: bool) -> Tint:
    keys = np.unique(face_keys(faces, solid.drawn.grid.shape, solid.step))
    return Tint(keys=keys, colour=colour, striped=striped)


def _spread(faces: Faces, most: int = _ARROWS) -> NDArray[np.intp]:
    """Some faces far from one another: each next one the farthest from those taken."""
    if len(faces) <= most:
        return np.arange(len(faces))
    middle = faces.centre.mean(axis=0)
    taken = [int(np.linalg.norm(faces.centre - middle, axis=1).argmin())]
    far = np.linalg.norm(faces.centre - faces.centre[taken[0]], axis=1)
    while len(taken) < most:
        taken.append(int(far.argmax()))
        far = np.minimum(far, np.linalg.norm(faces.centre - faces.centre[taken[-1]], axis=1))
    return np.array(taken)


def _anchors(solid: Solid, region: Region) -> tuple[Double, Double | None]:
    """Places on a region for arrows, and the mean normal at each where it has a surface.

    One normal for all, so that all arrows of one force begin on the surface or all end there.
    """
    faces = region.faces(solid.part)
    if len(faces):
        some = faces.select(_spread(faces))
        return some.centre, np.tile(faces.normal.mean(axis=0), (len(some), 1))
    cells = np.argwhere(region.voxels(solid.part))[:1]
    centres = solid.part.grid.centres()
    return np.column_stack([centres[a][cells[:, a]] for a in range(3)]), None


def _support(solid: Solid, support: Support, pushes: dict[str, _Push], tints: list[Tint]) -> None:
    tints.append(_tint(solid, support.region.faces(solid.part), _SUPPORT, striped=True))
    given = np.array([d or 0.0 for d in support.displacement])
    if given.any():
        places, normals = _anchors(solid, support.region)
        pushes["mm"].add(places, np.tile(given, (len(places), 1)), normals)


def _plate(solid: Solid, plate: Plate, pushes: dict[str, _Push], tints: list[Tint]) -> None:
    held = any(v is not None for v in plate.given)
    if held:
        tints.append(_tint(solid, plate.region.faces(solid.part), _SUPPORT, striped=True))
    places, normals = _anchors(solid, plate.region)
    if plate.point is not None:
        places, normals = np.array([plate.point]), None
    moved = np.array([d or 0.0 for d in plate.translation])
    for unit, vector in (("N", np.array(plate.force)), ("mm", moved)):
        pushes[unit].add(places, np.tile(vector, (len(places), 1)), normals)


def _load(solid: Solid, load: Load, pushes: dict[str, _Push], tints: list[Tint]) -> None:
    if isinstance(load, Force):
        places, normals = _anchors(solid, load.region)
        pushes["N"].add(places, np.tile(load.vector, (len(places), 1)), normals)
    elif isinstance(load, Pressure):
        faces = load.region.faces(solid.part)
        some = faces.select(_spread(faces))
        pushes["MPa"].add(some.centre, -load.pressure * some.normal, some.normal)
    elif isinstance(load, PressureMap):
        _map(solid, load, pushes["MPa"])
    elif isinstance(load, BodyForce):
        cells = np.argwhere(solid.part.solid)
        middle = np.array(solid.part.grid.origin) + (cells.mean(axis=0) + 0.5) * np.array(
            solid.part.grid.spacing
        )
        pushes["m/s²"].add(middle[None], 1e-3 * np.array([load.acceleration]), None)
    elif isinstance(load, GroundSpring | Foundation):
        tints.append(_tint(solid, load.region.faces(solid.part), _SPRING, striped=True))


def _map(solid: Solid, load: PressureMap, push: _Push) -> None:
    """Arrows where a pressure map presses, on the side that it lies on."""
    axis, side = parse_side(load.side, load.region.name)
    faces = load.region.faces(solid.part)
    faces = faces.select(visible_from(solid.part, faces, axis, side))
    values = load.at(faces.centre)
    pressed = np.flatnonzero(values > 0.02 * values.max(initial=0.0))
    if not len(pressed):
        return
    some = pressed[_spread(faces.select(pressed), 2 * _ARROWS)]
    some = np.union1d(some, values.argmax())  # the longest arrow is that of the largest value
    normal = faces.normal[some]
    if load.acts == "along":
        normal = np.zeros((len(some), 3))
        normal[:, axis] = side
    push.add(faces.centre[some], -values[some, None] * normal, faces.normal[some])


def _arrows(solid: Solid, push: _Push) -> tuple[list[Arrow], list[str]]:
    """Arrows as long as their values say, the longest of each kind alike."""
    if not push.places:
        return [], []
    sizes = np.linalg.norm(push.vectors, axis=1)
    low, high = solid.box
    longest = _LONGEST * float(np.linalg.norm(high - low))
    lengths = longest * np.maximum(sizes / sizes.max(), _SHORTEST)
    starts = solid.moved(np.array(push.places))
    made = []
    for acts, place, vector, normal, size, length in zip(
        push.places, starts, push.vectors, push.normals, sizes, lengths, strict=True
    ):
        along = length * vector / size
        # What presses ends on the surface; what pulls begins there.
        pulls = normal is not None and float(vector @ normal) > 0
        tail, tip = (place, place + along) if pulls else (place - along, place)
        made.append(
            Arrow(place=_triple(acts), tail=_triple(tail), tip=_triple(tip), colour=push.colour)
        )
    what = {"N": "force", "MPa": "pressure", "mm": "given motion"}.get(push.unit, "acceleration")
    return made, [f"longest {what} arrow: {quantity(float(sizes.max()), push.unit)}"]


def _triple(values: Double) -> tuple[float, float, float]:
    x, y, z = values
    return float(x), float(y), float(z)


def tinted(solid: Solid, surface: Surface, tints: Iterable[Tint]) -> NDArray[np.uint8]:
    """The colours of a surface with tints laid over them."""
    rgb = surface.rgb
    faces = surface.quads.faces
    keys = None
    for tint in tints:
        if keys is None:
            keys = face_keys(faces, solid.drawn.grid.shape)
            rgb = rgb.copy()
        on = np.isin(keys, tint.keys)
        if tint.striped:
            on &= faces.voxel.sum(axis=1) % 2 == 0
        colour = np.array([int(tint.colour[a : a + 2], 16) for a in (1, 3, 5)])
        share = 1.0 if tint.striped else 0.8
        rgb[on] = np.rint((1 - share) * rgb[on] + share * colour).astype(np.uint8)
    return rgb

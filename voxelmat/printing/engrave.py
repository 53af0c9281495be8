"""A mark cut into a flat face of a part that is not protected, if there is one large enough."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from voxelmat.errors import InputError
from voxelmat.model.part import DISTANCE_STEPS, Part
from voxelmat.model.profile import PrintProfile
from voxelmat.printing.marks import Mark, mark_cells, mark_text, rows_of, stroke_mm
from voxelmat.printing.place import rotation_matrix
from voxelmat.printing.support import outline_field

__all__ = ["FACES", "engraved"]

#: Faces by the tray axis that they look along, in the order in which one is chosen: below, where
#: a mark shows least, the sides, above.
FACES = ("z-", "x-", "x+", "y-", "y+", "z+")
#: Text on each face, read from outside: axis and sign along the text, and upwards.
_AXES = {
    "z-": ((0, -1), (1, 1)),
    "z+": ((0, 1), (1, 1)),
    "x-": ((1, -1), (2, 1)),
    "x+": ((1, 1), (2, 1)),
    "y-": ((0, 1), (2, 1)),
    "y+": ((0, -1), (2, 1)),
}
_LEVELS = 8  # depths at which a flat place is looked for, the largest first
_PAD = 4  # voxels round the text in which distances are measured


@dataclass(frozen=True, slots=True)
class _View:
    """A part seen from outside a face: arrays along the text, upwards, and inwards."""

    axes: tuple[tuple[int, int], tuple[int, int], tuple[int, int]]  # part axis and sign

    def of(self, array: NDArray[Any]) -> NDArray[Any]:
        """A view of a part array."""
        view = array.transpose([a for a, _ in self.axes])
        return view[tuple(slice(None, None, s) for _, s in self.axes)]


def _view(turn: NDArray[np.int64], face: str) -> _View:
    inward = ("xyz".index(face[0]), -1 if face[1] == "+" else 1)
    axes = []
    for tray, sign in (*_AXES[face], inward):
        part = int(np.flatnonzero(turn[tray])[0])
        axes.append((part, sign * int(turn[tray, part])))
    return _View((axes[0], axes[1], axes[2]))


def engraved(
    part: Part,
    profile: PrintProfile,
    *,
    job_number: str,
    number: int,
    side: str = "",
    name: str = "",
    orientation: tuple[str, ...] = (),
    face: str = "",
    depth_mm: float | None = None,
    protected: NDArray[np.bool_] | None = None,
) -> tuple[Part, Mark, str] | None:
    """Cut a mark into a part.

    Parameters
    ----------
    part : Part
    profile : PrintProfile
    job_number, number, side
        As for `voxelmat.printing.marks.mark_text`.
    name : str
        Of the part on the tray.
    orientation : tuple of str
        How the part lies, see `voxelmat.printing.place.rotation_matrix`; faces are those of the
        turned part.
    face : str
        One of `FACES`; the first with room if left out.
    depth_mm : float, optional
        The profile's width of strokes across the face if left out; rounded up to voxels.
    protected : ndarray of bool, optional
        Voxels ``[i, j, k]`` that must stay as they are.

    Returns
    -------
    tuple or None
        The part, its mark in the part's coordinates, and the face; None where no allowed face
        has a flat place that is large enough, with a sound wall behind it.

    Raises
    ------
    InputError
        For an unknown face, a wrong depth, or characters that cannot be written.
    """
    if face and face not in FACES:
        raise InputError(f"A face is one of {', '.join(FACES)}; got {face!r}.", key="face")
    if depth_mm is not None and not (math.isfinite(depth_mm) and depth_mm > 0):
        raise InputError(f"A mark's depth is above 0 mm; got {depth_mm}.", key="depth_mm")
    turn = rotation_matrix(orientation)
    solid = outline_field(part) < 0
    for candidate in (face,) if face else FACES:
        (u, us), (v, _) = _AXES[candidate]
        arrow = (">" if us > 0 else "<") + "XYZ"[u]
        text = mark_text(job_number, number, side, (arrow, "^" + "XYZ"[v]))
        cut = _Cut(part, profile, _view(turn, candidate), (u, v, "xyz".index(candidate[0])), text)
        place = cut.place(solid, depth_mm, protected)
        if place is not None:
            changed, mark = cut.made(place, name or part.name)
            return changed, mark, candidate
    return None


class _Cut:
    """Text on one face: how large in voxels, where there is room, and the part with it cut in."""

    def __init__(
        self,
        part: Part,
        profile: PrintProfile,
        view: _View,
        tray_axes: tuple[int, int, int],
        text: tuple[str, ...],
    ) -> None:
        self.part, self.view, self.text = part, view, text
        self.cells = mark_cells(text)
        self.spacing = tuple(part.grid.spacing[a] for a, _ in view.axes)
        stroke = [stroke_mm(profile, a) for a in tray_axes]
        self.stroke = stroke[2]
        self.size = [
            max(1, math.ceil(s / h - 1e-9)) for s, h in zip(stroke, self.spacing, strict=True)
        ]  # voxels a cell along the text and upwards, and in depth
        self.wall = max(1, math.ceil(profile.minimum.wall_xyz[tray_axes[2]] / self.spacing[2]))

    def place(
        self,
        solid: NDArray[np.bool_],
        depth_mm: float | None,
        protected: NDArray[np.bool_] | None,
    ) -> tuple[int, int, int] | None:
        """Lowest voxel of the text, and the plane of the face counted inwards."""
        if depth_mm is not None:
            self.size[2] = max(1, math.ceil(depth_mm / self.spacing[2] - 1e-9))
        seen = self.view.of(solid)
        top = np.where(seen.any(axis=2), seen.argmax(axis=2), -1)
        window = [n * k for n, k in zip(self.cells.shape, self.size, strict=False)]
        levels, counts = np.unique(top[top >= 0], return_counts=True)
        deep = self.size[2] + self.wall
        for level in levels[np.argsort(-counts, kind="stable")][:_LEVELS]:
            if level + deep > seen.shape[2]:
                continue
            flat = (top == level) & seen[:, :, level : level + deep].all(axis=2)
            if protected is not None:
                kept = self.view.of(protected)[:, :, level : level + self.size[2]]
                flat &= ~kept.any(axis=2)
            corner = _room(flat, (window[0], window[1]))
            if corner is not None:
                return (*corner, int(level))
        return None

    def made(self, place: tuple[int, int, int], name: str) -> tuple[Part, Mark]:
        """The part with the strokes cut out, and its mark."""
        part, (a, b, level) = self.part, place
        ku, kv, depth = self.size
        strokes = np.repeat(np.repeat(self.cells, ku, axis=0), kv, axis=1)
        block = np.zeros((*strokes.shape, level + depth + _PAD), dtype=np.bool_)
        block[:, :, : level + depth] = strokes[:, :, None]
        shape = self.view.of(part.labels).shape
        block = block[:, :, : shape[2]]
        index = (slice(a, a + block.shape[0]), slice(b, b + block.shape[1]), slice(block.shape[2]))
        changes: dict[str, Any] = {}
        for key in ("labels", "occupancy", "distance"):
            array = getattr(part, key)
            if array is None:
                continue
            array = array.copy(order="F")
            view = self.view.of(array)[index]
            if key == "distance":
                view[:] = np.maximum(view, self._from_strokes(block))
            else:
                view[block] = 0
            changes[key] = array
        return part.replace(**changes), self._mark(place, name)

    def _from_strokes(self, block: NDArray[np.bool_]) -> NDArray[np.int8]:
        """Distance into the strokes, in the steps of a part; negative outside them."""
        wide = np.pad(block, _PAD, mode="edge")
        inner = ndimage.distance_transform_edt(wide, sampling=self.spacing)
        outer = ndimage.distance_transform_edt(~wide, sampling=self.spacing)
        half = min(self.spacing) / 2
        depth = np.where(wide, inner - half, half - outer)
        steps = np.rint(depth * DISTANCE_STEPS / min(self.spacing))
        core = (slice(_PAD, -_PAD),) * 3
        return np.asarray(np.clip(steps[core], -127, 127), dtype=np.int8)

    def _mark(self, place: tuple[int, int, int], name: str) -> Mark:
        """Cell centres in part coordinates."""
        grid = self.part.grid
        first = np.zeros(3)
        steps = np.zeros((3, 3))
        middle = (
            place[0] + self.size[0] / 2,
            place[1] + self.size[1] / 2,
            place[2] + self.size[2] / 2,
        )
        for n, (axis, sign) in enumerate(self.view.axes):
            low, h = grid.origin[axis], grid.spacing[axis]
            first[axis] = low + h * (middle[n] if sign > 0 else grid.shape[axis] - middle[n])
            along = self.size[n] if n < 2 else (self.size[2] + self.wall) / 2
            steps[n, axis] = sign * h * along
        origin, right, up, inward = (tuple(float(x) for x in v) for v in (first, *steps))
        return Mark(
            part=name,
            text=self.text,
            rows=rows_of(self.cells),
            origin_mm=origin,  # type: ignore[arg-type]
            right_mm=right,  # type: ignore[arg-type]
            up_mm=up,  # type: ignore[arg-type]
            inward_mm=inward,  # type: ignore[arg-type]
            raised=False,
        )


def _room(flat: NDArray[np.bool_], window: tuple[int, int]) -> tuple[int, int] | None:
    """Corner of the window of true cells that lies nearest to the middle of them, or None."""
    w, h = window
    if w > flat.shape[0] or h > flat.shape[1]:
        return None
    total = np.pad(flat.astype(np.int64).cumsum(axis=0).cumsum(axis=1), ((1, 0), (1, 0)))
    count = total[w:, h:] - total[:-w, h:] - total[w:, :-h] + total[:-w, :-h]
    full = np.argwhere(count == w * h)
    if not len(full):
        return None
    middle = np.argwhere(flat).mean(axis=0) - np.array(window) / 2 + 0.5
    best = full[np.abs(full - middle).sum(axis=1).argmin()]
    return (int(best[0]), int(best[1]))

"""A shaded orthographic picture of voxel faces, drawn with NumPy alone."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.part import Part
from voxelmat.model.surface import Faces, carriers, exposed_faces

__all__ = ["Camera", "Shot", "draw_faces", "faces_of_cut"]

_BACKGROUND = 255
_PIXELS_A_VOXEL = 40


@dataclass(frozen=True, slots=True, kw_only=True)
class Camera:
    """Where the viewer stands: turned by `azimuth` round z from x+, raised by `elevation`.

    Attributes
    ----------
    azimuth, elevation : float
        Degrees.
    """

    azimuth: float = -62.0
    elevation: float = 24.0

    def axes(self) -> NDArray[np.float64]:
        """Right, up and towards the viewer, as rows."""
        a, e = math.radians(self.azimuth), math.radians(self.elevation)
        towards = np.array([math.cos(e) * math.cos(a), math.cos(e) * math.sin(a), math.sin(e)])
        right = np.array([-math.sin(a), math.cos(a), 0.0])
        return np.stack([right, np.cross(towards, right), towards])


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Shot:
    """A drawn picture and how its pixels lie in the world.

    Attributes
    ----------
    rgb : ndarray of uint8, shape (rows, columns, 3)
    camera : Camera
    left, top : float
        Right and up coordinate of the picture's top left corner, mm.
    pixel : float
        Edge of a pixel, mm.
    """

    rgb: NDArray[np.uint8]
    camera: Camera
    left: float
    top: float
    pixel: float

    def place(self, point: NDArray[np.float64]) -> tuple[float, float]:
        """Column and row of a point (mm)."""
        right, up, _ = self.camera.axes() @ point
        return (right - self.left) / self.pixel, (self.top - up) / self.pixel


def faces_of_cut(
    part: Part, shown: NDArray[np.bool_], outer: Faces | None = None
) -> tuple[Faces, NDArray[np.bool_]]:
    """Exposed faces of the voxels in `shown`, and which of them are cut faces.

    Cut faces border material that is not shown; their normal is that of the voxel face, while
    the others keep the true normal of the whole part's surface. `outer` are the exposed faces of
    the whole part, where they are known already.
    """
    solid = carriers(part)
    shown = shown & solid
    outer = exposed_faces(part) if outer is None else outer
    outer = outer.select(shown[tuple(outer.voxel.T)])
    centres, spacing = part.grid.centres(), part.grid.spacing
    found = [(outer, np.zeros(len(outer), dtype=bool))]
    hidden = np.pad(solid & ~shown, 1)
    for axis in range(3):
        for side in (-1, 1):
            shift = [slice(1, -1)] * 3
            shift[axis] = slice(2, None) if side > 0 else slice(0, -2)
            voxel = np.argwhere(shown & hidden[tuple(shift)])
            middle = np.column_stack([centres[a][voxel[:, a]] for a in range(3)])
            middle[:, axis] += 0.5 * side * spacing[axis]
            normal = np.zeros((len(voxel), 3))
            normal[:, axis] = side
            cut = Faces(
                voxel=voxel,
                axis=np.full(len(voxel), axis, np.int8),
                side=np.full(len(voxel), side, np.int8),
                area=np.full(len(voxel), part.grid.voxel_volume / spacing[axis]),
                centre=middle,
                normal=normal,
            )
            found.append((cut, np.ones(len(voxel), dtype=bool)))
    faces = Faces(
        **{
            name: np.concatenate([getattr(f, name) for f, _ in found])
            for name in ("voxel", "axis", "side", "area", "centre", "normal")
        }
    )
    return faces, np.concatenate([c for _, c in found])


def _shade(faces: Faces, camera: NDArray[np.float64]) -> NDArray[np.float64]:
    """How bright each face is, 0.4 to 1: a lamp over the viewer's left shoulder."""
    lamp = camera[2] + 0.55 * camera[1] - 0.35 * camera[0]
    lamp /= np.linalg.norm(lamp)
    return np.asarray(0.42 + 0.58 * np.clip(faces.normal @ lamp, 0.0, 1.0))


def _picture_frame(
    corners: NDArray[np.float64], axes: NDArray[np.float64], width: int
) -> tuple[float, float, float, int]:
    """Left, top (mm), pixel (mm) and rows of a picture that holds `corners`."""
    flat = corners @ axes[:2].T
    low, high = flat.min(axis=0), flat.max(axis=0)
    margin = 0.03 * (high[0] - low[0])
    pixel = (high[0] - low[0] + 2 * margin) / width
    rows = math.ceil((high[1] - low[1] + 2 * margin) / pixel)
    return low[0] - margin, high[1] + margin, pixel, rows


def _box_corners(faces: Faces, spacing: tuple[float, float, float]) -> NDArray[np.float64]:
    low = faces.centre.min(axis=0) - np.asarray(spacing) / 2
    high = faces.centre.max(axis=0) + np.asarray(spacing) / 2
    pick = np.array([[c & 1, c >> 1 & 1, c >> 2] for c in range(8)])
    return np.asarray(np.where(pick == 1, high, low))


def draw_faces(
    faces: Faces,
    rgb: NDArray[np.uint8],
    spacing: tuple[float, float, float],
    *,
    camera: Camera | None = None,
    width: int = 900,
    around: Faces | None = None,
) -> Shot:
    """Draw faces, nearest in front.

    Parameters
    ----------
    faces : Faces
        None at all leave the picture white where `around` has some.
    rgb : ndarray of uint8, shape (n, 3)
        Colour of each face before shading.
    spacing : tuple of float
        Voxel edges, mm.
    camera : Camera, optional
    width : int
        Columns of the picture, at most.
    around : Faces, optional
        What the picture is to have room for, so that several come out at one scale.

    Returns
    -------
    Shot

    Raises
    ------
    InputError
        No face in `faces` and none in `around`.
    """
    if not len(faces) and not (around and len(around)):
        raise InputError(
            "There is nothing to draw: the part has no voxel of material inside its outline. Look "
            "at its bodies, or at the limits that its design had to keep."
        )
    camera = camera or Camera()
    axes = camera.axes()
    box = _box_corners(around or faces, spacing)
    # A voxel larger than this many pixels would only cost time.
    span = float(np.ptp(box @ axes[0])) * 1.06
    width = max(64, min(width, round(span / max(spacing) * _PIXELS_A_VOXEL)))
    left, top, pixel, rows = _picture_frame(box, axes, width)
    facing = axes[2][faces.axis] * faces.side > 0
    seen = faces.select(facing)
    colour = rgb[facing] * _shade(seen, axes)[:, None]
    depth = np.full(rows * width, -np.inf)
    owner = np.full(rows * width, -1, dtype=np.intp)
    number = np.arange(len(seen))
    # Each face is laid down as a raster of points finer than a pixel, so that no gap shows.
    for axis in range(3):
        own = seen.axis == axis
        across = [a for a in range(3) if a != axis]
        steps = [max(2, math.ceil(1.6 * spacing[a] / pixel)) for a in across]
        flat = seen.centre[own] @ axes.T
        for s in range(steps[0]):
            for t in range(steps[1]):
                shift = np.zeros(3)
                shift[across[0]] = ((s + 0.5) / steps[0] - 0.5) * spacing[across[0]]
                shift[across[1]] = ((t + 0.5) / steps[1] - 0.5) * spacing[across[1]]
                at = flat + axes @ shift
                column = ((at[:, 0] - left) / pixel).astype(np.intp)
                row = ((top - at[:, 1]) / pixel).astype(np.intp)
                spot = np.clip(row, 0, rows - 1) * width + np.clip(column, 0, width - 1)
                near_last = np.argsort(at[:, 2], kind="stable")
                spot, far = spot[near_last], at[near_last, 2]
                wins = far > depth[spot]
                spot, far = spot[wins], far[wins]
                depth[spot] = far  # of several in one pixel the last, nearest one stays
                owner[spot] = number[own][near_last][wins]
    picture = np.full((rows * width, 3), _BACKGROUND, dtype=np.uint8)
    hit = owner >= 0
    picture[hit] = np.rint(colour[owner[hit]]).astype(np.uint8)
    return Shot(rgb=picture.reshape(rows, width, 3), camera=camera, left=left, top=top, pixel=pixel)

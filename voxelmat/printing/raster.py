"""Where a part lies on the tray and where its droplet sites are, both ways."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.profile import PrintProfile

__all__ = ["Box", "Raster", "place", "rotation_matrix"]

_TURN = re.compile(r"^\s*([xyz])\s*([+-]?\d+)\s*$")
_EPSILON = 1e-9  # of a site: lets 10 mm at 0.1 mm be 100 sites and not 101
Box = tuple[tuple[float, float, float], tuple[float, float, float]]
Matrix = tuple[tuple[int, int, int], tuple[int, int, int], tuple[int, int, int]]


def rotation_matrix(turns: Sequence[str] = ()) -> NDArray[np.int64]:
    """The rotation of a build orientation, always right-handed.

    Parameters
    ----------
    turns : sequence of str
        Turns about the axes of the tray, in order, each an axis and a multiple of 90 degrees:
        ``["x 90", "z -90"]``. Other angles would need the shape again, not its voxels; turn the
        mesh before it is voxelised.

    Returns
    -------
    ndarray of int, shape (3, 3)
        ``tray = R @ part``; a signed permutation.

    Raises
    ------
    InputError
        For anything but an axis and a multiple of 90.

    Examples
    --------
    >>> rotation_matrix(["z 90"]).tolist()
    [[0, -1, 0], [1, 0, 0], [0, 0, 1]]
    """
    if isinstance(turns, str):
        turns = [turns]
    total = np.eye(3, dtype=np.int64)
    if not isinstance(turns, Sequence):
        raise InputError(f"A build orientation is a list of turns; got {turns!r}.")
    for turn in turns:
        match = _TURN.match(str(turn))
        if match is None or int(match[2]) % 90:
            raise InputError(
                f"A build orientation is a list of turns such as 'x 90' or 'z -90', an axis and a "
                f"multiple of 90 degrees; got {turn!r}. For another angle turn the mesh itself.",
                key="orientation",
            )
        axis = "xyz".index(match[1])
        a, b = (axis + 1) % 3, (axis + 2) % 3
        quarter = np.zeros((3, 3), dtype=np.int64)
        quarter[axis, axis] = 1
        quarter[b, a], quarter[a, b] = 1, -1
        for _ in range(int(match[2]) // 90 % 4):
            total = quarter @ total
    return total


@dataclass(frozen=True, slots=True, kw_only=True)
class Raster:
    """A window of droplet sites on the tray, and the transform of the part into it.

    Site ``(i, j, k)`` of the window has its centre at ``(offset + (i, j, k) + 0.5) * pitch`` in
    tray coordinates (mm, origin in the front left bottom corner), and
    ``tray = rotation @ part + translation``.

    Attributes
    ----------
    pitch : tuple of Fraction
        Along tray x, y, z, mm.
    shape, offset : tuple of int
        Sites of the window, and its first site on the tray, along tray x, y, z.
    rotation : nested tuple of int
        Signed permutation of determinant 1.
    translation : tuple of float
        mm.
    tray_sites : tuple of int
        Sites along x and y that the whole tray holds.
    origin_corner, row_direction : str
        Of the images; see `voxelmat.model.profile`.
    """

    pitch: tuple[Fraction, Fraction, Fraction]
    shape: tuple[int, int, int]
    offset: tuple[int, int, int]
    rotation: Matrix
    translation: tuple[float, float, float]
    tray_sites: tuple[int, int]
    origin_corner: str = "front left"
    row_direction: str = "x"

    def __post_init__(self) -> None:
        turn = np.array(self.rotation)
        if (
            turn.shape != (3, 3)
            or not (turn @ turn.T == np.eye(3)).all()
            or (round(float(np.linalg.det(turn))) != 1)
        ):
            raise InputError(f"A rotation is a right-handed signed permutation; got {turn}.")
        if not all(n >= 1 for n in self.shape) or self.offset[2] != 0 or min(self.offset) < 0:
            raise InputError(f"A raster window of {self.shape} at {self.offset} is not possible.")

    # ------------------------------------------------------------------ image layout
    @property
    def image_axes(self) -> tuple[tuple[int, int], tuple[int, int], tuple[int, int]]:
        """Tray axis and sign that layers, rows and columns follow."""
        sign_x = 1 if self.origin_corner.endswith("left") else -1
        sign_y = 1 if self.origin_corner.startswith("front") else -1
        if self.row_direction == "x":
            return ((2, 1), (1, sign_y), (0, sign_x))
        return ((2, 1), (0, sign_x), (1, sign_y))

    @property
    def image_shape(self) -> tuple[int, int, int]:
        """Layers, rows a layer, columns a row."""
        layer, row, column = (self.shape[axis] for axis, _ in self.image_axes)
        return (layer, row, column)

    @property
    def image_offset(self) -> tuple[int, int, int]:
        """Layer, row and column of the window's first pixel in the image of the whole tray."""
        sites = (*self.tray_sites, 0)
        layer, row, column = (
            self.offset[a] if s > 0 else sites[a] - self.offset[a] - self.shape[a]
            for a, s in self.image_axes
        )
        return (layer, row, column)

    @property
    def pixels_per_metre(self) -> tuple[int, int]:
        """Along columns and rows, as a PNG states it."""
        (_, _), (row, _), (column, _) = self.image_axes
        return (round(1000 / self.pitch[column]), round(1000 / self.pitch[row]))

    def from_image(self, image: NDArray[Any]) -> NDArray[Any]:
        """One layer ``[row, column]`` as a view ``[ix, iy]`` along tray x and y."""
        _, (_, row_sign), (_, column_sign) = self.image_axes
        view = image[::row_sign, ::column_sign]
        return view.T if self.row_direction == "x" else view

    # ------------------------------------------------------------------ design grid
    def part_axes(self) -> list[tuple[int, int]]:
        """Part axis and sign that layers, rows and columns follow."""
        turn = np.array(self.rotation)
        axes = []
        for tray, sign in self.image_axes:
            part = int(np.flatnonzero(turn[tray])[0])
            axes.append((part, sign * int(turn[tray, part])))
        return axes

    def to_image(self, array: NDArray[Any]) -> NDArray[Any]:
        """A field ``[i, j, k]`` on the design grid as a C-ordered copy ``[layer, row, column]``."""
        axes = self.part_axes()
        view = array.transpose([a for a, _ in axes])
        return np.ascontiguousarray(view[tuple(slice(None, None, s) for _, s in axes)])

    def to_part(self, array: NDArray[Any]) -> NDArray[Any]:
        """The inverse of `to_image`, x fastest in memory."""
        axes = self.part_axes()
        view = array[tuple(slice(None, None, s) for _, s in axes)]
        return np.asfortranarray(view.transpose(np.argsort([a for a, _ in axes])))

    def image_index(self, grid: VoxelGrid, image_axis: int) -> NDArray[np.float64]:
        """Where the site centres of one image axis lie, in voxels of `grid` laid as `to_image`.

        Parameters
        ----------
        grid : VoxelGrid
        image_axis : int
            0 layers, 1 rows, 2 columns.

        Returns
        -------
        ndarray of float64
            One value a layer, row or column; 0.0 is the centre of the first voxel.
        """
        tray, sign = self.image_axes[image_axis]
        part, part_sign = self.part_axes()[image_axis]
        order = np.arange(self.shape[tray])
        sites = (order if sign > 0 else order[::-1]) + self.offset[tray]
        mm = (sites + 0.5) * float(self.pitch[tray])
        along = sign * part_sign * (mm - self.translation[tray])
        index = (along - grid.origin[part]) / grid.spacing[part] - 0.5
        return np.asarray(index if part_sign > 0 else grid.shape[part] - 1 - index, np.float64)

    # ------------------------------------------------------------------ points
    def site_to_part(self, site: tuple[float, float, float]) -> tuple[float, float, float]:
        """The centre of a site of the window (tray order), in part coordinates, mm."""
        tray = (np.array(site) + np.array(self.offset) + 0.5) * [float(p) for p in self.pitch]
        x, y, z = np.array(self.rotation).T @ (tray - np.array(self.translation))
        return (float(x), float(y), float(z))

    def pixel_to_part(self, layer: int, row: int, column: int) -> tuple[float, float, float]:
        """The centre of a pixel of the images, in part coordinates, mm."""
        site = [0.0, 0.0, 0.0]
        for (axis, sign), at in zip(self.image_axes, (layer, row, column), strict=True):
            site[axis] = at if sign > 0 else self.shape[axis] - 1 - at
        return self.site_to_part((site[0], site[1], site[2]))

    @property
    def site_volume(self) -> Fraction:
        """Volume of one site, mm^3, exact."""
        return self.pitch[0] * self.pitch[1] * self.pitch[2]

    # ------------------------------------------------------------------ plain data
    def as_dict(self) -> dict[str, Any]:
        """Plain data; pitches as exact fractions of a millimetre."""
        return {
            "pitch_mm": [str(p) for p in self.pitch],
            "pitch_um": [float(p * 1000) for p in self.pitch],
            "sites": list(self.shape),
            "offset_sites": list(self.offset),
            "tray_sites": list(self.tray_sites),
            "rotation": [list(r) for r in self.rotation],
            "translation_mm": list(self.translation),
            "origin_corner": self.origin_corner,
            "row_direction": self.row_direction,
        }

    @classmethod
    def from_dict(cls, data: Mapping[str, Any]) -> Raster:
        """The inverse of `as_dict` (``pitch_um`` is for people and is not read)."""
        return cls(
            pitch=tuple(Fraction(p) for p in data["pitch_mm"]),  # type: ignore[arg-type]
            shape=tuple(data["sites"]),
            offset=tuple(data["offset_sites"]),
            rotation=tuple(tuple(r) for r in data["rotation"]),  # type: ignore[arg-type]
            translation=tuple(data["translation_mm"]),
            tray_sites=tuple(data["tray_sites"]),
            origin_corner=data["origin_corner"],
            row_direction=data["row_direction"],
        )


def place(
    box: Box,
    profile: PrintProfile,
    turns: Sequence[str] = (),
    position: tuple[float, float] | None = None,
) -> Raster:
    """Turn a part and set it on the tray.

    Parameters
    ----------
    box : pair of tuples of float
        Low and high corner of the part's outline in part coordinates, mm.
    profile : PrintProfile
    turns : sequence of str
        See `rotation_matrix`.
    position : tuple of float, optional
        Where the low x and y corner of the turned part goes on the tray, mm from its front left
        corner, moved down to whole sites. In the middle where it is left out.

    Raises
    ------
    InputError
        If the part does not fit on the usable tray, with the numbers.
    """
    turn = rotation_matrix(turns)
    corners = np.stack([turn @ np.array(box[0]), turn @ np.array(box[1])])
    low, high = corners.min(axis=0), corners.max(axis=0)
    size = high - low
    pitch = [float(p) for p in profile.pitch]
    shape = [max(1, int(np.ceil(s / p - _EPSILON))) for s, p in zip(size, pitch, strict=True)]
    margin = (profile.edge_margin, profile.edge_margin, 0.0)
    room = [t - 2 * m for t, m in zip(profile.tray_size, margin, strict=True)]
    if any(s > r + _EPSILON for s, r in zip(size, room, strict=True)):
        raise InputError(
            f"The part takes {_mm(size)} on the tray, but profile '{profile.name}' has room for "
            f"{_mm(room)} ({_mm(profile.tray_size)} less a margin of {profile.edge_margin:g} mm "
            "at each side). Turn the part, or take a printer with a larger tray.",
            key="profile",
        )
    if position is None:
        x, y = ((t - s) / 2 for t, s in zip(profile.tray_size[:2], size[:2], strict=True))
        corner = (float(x), float(y))
    else:
        corner = _position(position)
    for axis in (0, 1):
        if not (
            margin[axis] - _EPSILON <= corner[axis]
            and corner[axis] + size[axis] <= profile.tray_size[axis] - margin[axis] + _EPSILON
        ):
            raise InputError(
                f"At position {corner[0]:g}, {corner[1]:g} mm a part of {_mm(size)} reaches past "
                f"the usable tray: {'xy'[axis]} must lie in {margin[axis]:g} to "
                f"{profile.tray_size[axis] - margin[axis] - size[axis]:g} mm.",
                key="position",
            )
    offset = [int(np.floor(c / p + _EPSILON)) for c, p in zip(corner, pitch, strict=False)] + [0]
    origin = [float(o * p) for o, p in zip(offset, profile.pitch, strict=True)]
    move = [float(o - v) for o, v in zip(origin, low, strict=True)]
    sites = profile.tray_sites
    return Raster(
        pitch=profile.pitch,
        shape=(shape[0], shape[1], shape[2]),
        offset=(offset[0], offset[1], 0),
        rotation=tuple(tuple(int(v) for v in row) for row in turn),  # type: ignore[arg-type]
        translation=(move[0], move[1], move[2]),
        tray_sites=(sites[0], sites[1]),
        origin_corner=profile.origin_corner,
        row_direction=profile.row_direction,
    )


def _position(value: object) -> tuple[float, float]:
    """Two numbers, or an `InputError`."""
    try:
        x, y = (float(v) for v in value)  # type: ignore[attr-defined]
    except (TypeError, ValueError):
        raise InputError(
            f"A position is two lengths in mm, along x and y of the tray; got {value!r}.",
            key="position",
        ) from None
    return x, y


def _mm(values: Sequence[float] | NDArray[np.float64]) -> str:
    return " x ".join(f"{float(v):.4g}" for v in values) + " mm"

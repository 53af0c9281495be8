"""Droplet sites on the tray, and the transform of a part into them, both ways."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.grid import VoxelGrid

__all__ = ["Raster"]

Matrix = tuple[tuple[int, int, int], tuple[int, int, int], tuple[int, int, int]]


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

    def holds(self, other: Raster) -> bool:
        """True where `other` is a window of the same raster that lies inside this one."""
        return (
            (self.pitch, self.tray_sites) == (other.pitch, other.tray_sites)
            and self.origin_corner == other.origin_corner
            and self.row_direction == other.row_direction
            and all(
                a <= b and b + m <= a + n
                for a, n, b, m in zip(
                    self.offset, self.shape, other.offset, other.shape, strict=True
                )
            )
        )

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

    def pixel_to_tray(self, layer: int, row: int, column: int) -> tuple[float, float, float]:
        """The centre of a pixel of the images, in tray coordinates, mm."""
        place = [0.0, 0.0, 0.0]
        for (axis, sign), at in zip(self.image_axes, (layer, row, column), strict=True):
            site = at if sign > 0 else self.shape[axis] - 1 - at
            place[axis] = (site + self.offset[axis] + 0.5) * float(self.pitch[axis])
        return (place[0], place[1], place[2])

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

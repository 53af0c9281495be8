"""A regular voxel grid: how many voxels, how large, and where."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError

__all__ = ["VoxelGrid"]

_LIMIT = 2**40  # voxels; beyond this an index arithmetic slip is likelier than a real design


def _triple(value: object, name: str) -> tuple[Any, Any, Any]:
    try:
        items = tuple(value)  # type: ignore[arg-type, var-annotated]
    except TypeError:
        items = ()
    if len(items) != 3:
        raise InputError(f"{name} takes three values, along x, y and z; got {value!r}.")
    return items[0], items[1], items[2]


@dataclass(frozen=True, slots=True, kw_only=True)
class VoxelGrid:
    """Where the voxels are.

    Arrays on a grid are indexed ``[i, j, k]`` along x, y, z. Voxel ``(i, j, k)`` spans
    ``origin + spacing * (i, j, k)`` to ``origin + spacing * (i + 1, j + 1, k + 1)``.

    Attributes
    ----------
    shape : tuple of int
        Voxels along x, y, z.
    spacing : tuple of float
        Voxel edge along x, y, z, mm.
    origin : tuple of float
        The low corner of voxel (0, 0, 0), mm.

    Raises
    ------
    InputError
        If a count is below 1, or a spacing is not a positive finite number.
    """

    shape: tuple[int, int, int]
    spacing: tuple[float, float, float]
    origin: tuple[float, float, float] = (0.0, 0.0, 0.0)

    def __post_init__(self) -> None:
        counts = _triple(self.shape, "shape")
        if not all(float(n) == int(n) and int(n) >= 1 for n in counts):
            raise InputError(f"A grid needs at least one voxel an axis; got shape {self.shape}.")
        shape = (int(counts[0]), int(counts[1]), int(counts[2]))
        if math.prod(shape) > _LIMIT:
            raise InputError(f"A grid of {shape} is larger than 2^40 voxels; use larger voxels.")
        spacing = tuple(float(h) for h in _triple(self.spacing, "spacing"))
        if not all(math.isfinite(h) and h > 0 for h in spacing):
            raise InputError(f"Spacing must be positive, in mm; got {self.spacing}.")
        origin = tuple(float(x) for x in _triple(self.origin, "origin"))
        if not all(math.isfinite(x) for x in origin):
            raise InputError(f"Origin must be finite, in mm; got {self.origin}.")
        object.__setattr__(self, "shape", shape)
        object.__setattr__(self, "spacing", spacing)
        object.__setattr__(self, "origin", origin)

    @property
    def n_voxels(self) -> int:
        """Voxels in the whole box."""
        return math.prod(self.shape)

    @property
    def node_shape(self) -> tuple[int, int, int]:
        """Nodes (voxel corners) along x, y, z."""
        return (self.shape[0] + 1, self.shape[1] + 1, self.shape[2] + 1)

    @property
    def voxel_volume(self) -> float:
        """Volume of one voxel, mm^3."""
        return math.prod(self.spacing)

    @property
    def upper(self) -> tuple[float, float, float]:
        """The high corner of the box, mm."""
        o, n, h = self.origin, self.shape, self.spacing
        return (o[0] + n[0] * h[0], o[1] + n[1] * h[1], o[2] + n[2] * h[2])

    def centres(self) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
        """Voxel centre coordinates along each axis, mm: three 1-D arrays."""
        x, y, z = (
            o + h * (np.arange(n, dtype=np.float64) + 0.5)
            for o, h, n in zip(self.origin, self.spacing, self.shape, strict=True)
        )
        return x, y, z

    def nodes(self) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
        """Node coordinates along each axis, mm: three 1-D arrays."""
        x, y, z = (
            o + h * np.arange(n + 1, dtype=np.float64)
            for o, h, n in zip(self.origin, self.spacing, self.shape, strict=True)
        )
        return x, y, z

    def index_of(self, point: tuple[float, float, float]) -> tuple[int, int, int] | None:
        """The voxel that holds `point` (mm), or None outside the box."""
        cell = [
            math.floor((p - o) / h)
            for p, o, h in zip(point, self.origin, self.spacing, strict=True)
        ]
        inside = all(0 <= c < n for c, n in zip(cell, self.shape, strict=True))
        return (cell[0], cell[1], cell[2]) if inside else None

    def as_dict(self) -> dict[str, list[float] | list[int]]:
        """Plain data, lengths in mm."""
        return {
            "shape": list(self.shape),
            "spacing_mm": list(self.spacing),
            "origin_mm": list(self.origin),
        }

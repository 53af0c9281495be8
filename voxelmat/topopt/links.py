"""Which voxels are alike: mirrored, extruded, repeated, or of one zone."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError

__all__ = ["Mirror", "Sharing", "box_of", "groups", "spread"]

Array = NDArray[np.float64]
Bools = NDArray[np.bool_]
Numbers = NDArray[np.intp]
Box = tuple[slice, ...]


def box_of(shape: Bools) -> Box:
    """The smallest box of voxels that holds all of a shape, along z, y, x."""
    places = np.argwhere(shape)
    low, high = places.min(0), places.max(0)
    return tuple(slice(int(a), int(b) + 1) for a, b in zip(low, high, strict=True))


def groups(
    shape: Bools, mirrors: tuple[int, ...], extruded: tuple[int, ...], repeated: Mapping[int, int]
) -> Numbers | None:
    """A number for each voxel, the same for voxels that are to be alike.

    Parameters
    ----------
    shape : ndarray of bool, (nz, ny, nx)
        Its box is what is mirrored and divided.
    mirrors, extruded : tuple of int
        Axes, 0 = z, 1 = y, 2 = x.
    repeated : mapping of int to int
        How often the design is repeated along an axis.

    Returns
    -------
    ndarray of int, (nz, ny, nx), or None
        None where nothing is extruded or repeated (mirrors alone need no groups).

    Raises
    ------
    InputError
        If an axis is both extruded and repeated, or cannot be divided.
    """
    if not extruded and not repeated:
        return None
    both = set(extruded) & set(repeated)
    if both:
        raise InputError(
            f"The design is extruded and repeated along {'zyx'[min(both)]} at once; an extruded "
            "design is the same everywhere, so leave the repetition out."
        )
    box = box_of(shape)
    at = []
    for axis, span in enumerate(box):
        length = span.stop - span.start
        place = np.arange(shape.shape[axis]) - span.start
        if axis in extruded:
            place = np.zeros_like(place)
        else:
            if axis in repeated:
                count = repeated[axis]
                if length % count:
                    raise InputError(
                        f"The shape is {length} voxels long along {'zyx'[axis]}, which cannot be "
                        f"divided into {count} equal repetitions; change the number or the grid."
                    )
                length //= count
                place = np.mod(place, length)
            if axis in mirrors:
                place = np.minimum(place, length - 1 - place)
        at.append(place - place.min())
    z, y, x = np.meshgrid(*at, indexing="ij")
    return np.asarray((z * (y.max() + 1) + y) * (x.max() + 1) + x, dtype=np.intp)


def spread(mask: Bools, domain: Bools, group: Numbers | None) -> Bools:
    """Voxels of the domain that are alike with any of the mask."""
    if group is None:
        return mask
    marked = np.bincount(group[mask & domain], minlength=int(group.max()) + 1) > 0
    return np.asarray(marked[group] & domain)


class Sharing:
    """From unknowns to voxels and back, where several voxels may share one unknown.

    Parameters
    ----------
    free : ndarray of bool, (nz, ny, nx)
        Voxels that have an unknown.
    group : ndarray of int or None
        Voxels of one number share it; None: every voxel has its own.
    """

    def __init__(self, free: Bools, group: Numbers | None) -> None:
        self.shared = group is not None
        self.n = int(free.sum())
        if group is not None:
            found, self._index = np.unique(group[free], return_inverse=True)
            self._index = self._index.reshape(-1)
            self.n = found.size
            self._count = np.bincount(self._index, minlength=self.n).astype(np.float64)

    def expand(self, x: Array) -> Array:
        """Value of each free voxel."""
        return np.asarray(x[self._index]) if self.shared else x

    def gather(self, values: Array) -> Array:
        """Sum over the voxels of each unknown: the transpose of `expand`."""
        if not self.shared:
            return values
        total = np.bincount(self._index, weights=values, minlength=self.n)
        return np.asarray(total, dtype=np.float64)

    def average(self, values: Array) -> Array:
        """Mean over the voxels of each unknown."""
        return self.gather(values) / self._count if self.shared else values

    def level(self, values: Array) -> Array:
        """Each free voxel gets the mean over those it is alike with; its own transpose."""
        return self.expand(self.average(values)) if self.shared else values


class Mirror:
    """Mean over mirror images inside the box of the shape: linear and its own transpose."""

    def __init__(self, axes: tuple[int, ...], shape: Bools) -> None:
        self._axes = axes
        self._box = box_of(shape) if axes and shape.any() else ()

    def __call__(self, field: Array) -> Array:
        """The symmetric part of a field."""
        if not self._axes:
            return field
        out = field.copy()
        for axis in self._axes:
            part = out[self._box]
            out[self._box] = 0.5 * (part + np.flip(part, axis))
        return out

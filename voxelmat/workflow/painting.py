"""Puts blends into voxels of a part: one by one from a list, or as another part has them."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.blend import Blend
from voxelmat.model.part import DISTANCE_STEPS, Part

__all__ = ["label_of", "laid_from", "painted"]

#: A blend this close to one of the palette takes its label.
_SAME = 1e-6
_FARTHEST = 127  # steps of the stored distance
_MOST = 65536  # entries of a palette


def painted(
    part: Part, voxels: NDArray[np.bool_], steps: NDArray[np.intp], blends: list[Blend]
) -> Part:
    """Give voxels, in index order, the blend of their step.

    Parameters
    ----------
    part : Part
    voxels : ndarray of bool, shape (nx, ny, nz)
    steps : ndarray of int, shape (n,)
        Index into `blends` of each voxel of the mask.
    blends : list of Blend
    """
    palette = list(part.palette)
    table = np.zeros(len(blends), dtype=np.int64)
    for step in np.unique(steps):
        table[step] = label_of(palette, blends[step])
    _check_size(palette)
    labels = part.labels.copy(order="F")
    labels[voxels] = table[steps].astype(np.uint16)
    return part.replace(palette=tuple(palette), labels=labels)


def _check_size(palette: list[Blend]) -> None:
    if len(palette) > _MOST:
        raise InputError(
            f"The rules ask for {len(palette)} blends; a palette holds {_MOST}. Use fewer levels."
        )


def label_of(palette: list[Blend], blend: Blend) -> int:
    """The label of a blend, added to the palette if nothing there is the same."""
    wanted = dict(blend.fractions)
    for i, known in enumerate(palette):
        have = dict(known.fractions)
        if have.keys() == wanted.keys() and all(
            abs(have[n] - f) <= _SAME for n, f in wanted.items()
        ):
            return i
    palette.append(blend)
    return len(palette) - 1


def laid_from(part: Part, voxels: NDArray[np.bool_], kept: Part) -> Part:
    """Lay material as another part has it; what is empty there becomes empty.

    Parameters
    ----------
    part : Part
    voxels : ndarray of bool, shape (nx, ny, nz)
        Where.
    kept : Part
        On any grid: its nearest voxel is taken, its outline interpolated.

    Returns
    -------
    Part
        Its outline is that of both shapes together where `voxels` is set.
    """
    palette = list(part.palette)
    table = np.array([0, *(label_of(palette, b) for b in kept.palette[1:])], dtype=np.uint16)
    _check_size(palette)
    if kept.grid == part.grid:
        fresh, distance, fill = kept.labels, kept.distance, _share(kept)
    else:
        fresh, distance, fill = _sampled(part, kept)
    labels = part.labels.copy(order="F")
    labels[voxels] = table[fresh[voxels]]
    own = _share(part)
    share = np.where(voxels & (labels > 0), np.minimum(own, fill), own)
    share = np.where(labels > 0, share, 0.0)
    occupancy = np.rint(255 * share).astype(np.uint8)
    occupancy[(share > 0) & (occupancy == 0)] = 1
    labels[occupancy == 0] = 0
    outline = part.distance
    if outline is not None:
        steps = distance if distance is not None else _from_fill(fill)
        outline = np.where(voxels, np.maximum(outline, steps), outline).astype(np.int8)
    bodies = {name: mask & (labels > 0) for name, mask in part.bodies.items()}
    return part.replace(
        palette=tuple(palette), labels=labels, occupancy=occupancy, distance=outline, bodies=bodies
    )


def _share(part: Part) -> NDArray[np.float32]:
    """Solid fraction of every voxel, thin edges too, 0 to 1."""
    if part.occupancy is None:
        return np.asarray(part.labels > 0, dtype=np.float32)
    return np.divide(part.occupancy, 255, dtype=np.float32)


def _from_fill(fill: NDArray[np.float32]) -> NDArray[np.int8]:
    """A distance good to the place of a plane through each voxel, in steps."""
    return np.asarray(np.rint((0.5 - fill) * DISTANCE_STEPS), dtype=np.int8)


def _sampled(
    part: Part, kept: Part
) -> tuple[NDArray[np.uint16], NDArray[np.int8] | None, NDArray[np.float32]]:
    """Labels (nearest), distance and fill (trilinear) of `kept` at the voxels of `part`."""
    from scipy import ndimage

    index = [
        (c - o) / h - 0.5
        for c, o, h in zip(part.grid.centres(), kept.grid.origin, kept.grid.spacing, strict=True)
    ]
    near = [
        np.clip(np.rint(i).astype(int), 0, n - 1)
        for i, n in zip(index, kept.grid.shape, strict=True)
    ]
    labels = kept.labels[np.ix_(*near)]
    where = np.meshgrid(*index, indexing="ij")

    def at(field: NDArray[np.generic]) -> NDArray[np.float32]:
        smooth = np.asarray(field, dtype=np.float32)
        return np.asarray(ndimage.map_coordinates(smooth, where, order=1, mode="nearest"))

    distance = None
    if kept.distance is None:
        fill = at(_share(kept))
    else:
        scale = min(kept.grid.spacing) / min(part.grid.spacing)
        steps = scale * at(kept.distance)
        distance = np.clip(np.rint(steps), -_FARTHEST, _FARTHEST).astype(np.int8)
        # From the distance: an interpolated fill would wear away the outside of the shape.
        fill = np.clip(0.5 - steps / DISTANCE_STEPS, 0.0, 1.0)
    # A voxel that is partly full needs a material: that of the nearest one which has some.
    if ((labels == 0) & (fill > 0)).any():
        _, nearest = ndimage.distance_transform_edt(kept.labels == 0, return_indices=True)
        filled = kept.labels[tuple(nearest)]
        labels = np.where(fill > 0, filled[np.ix_(*near)], labels)
    return labels, distance, fill

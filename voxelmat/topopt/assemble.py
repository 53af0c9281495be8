"""From optimised fields to a part: palette, labels, and an outline without stairs."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.part import DISTANCE_STEPS, Part
from voxelmat.topopt.blending import purest
from voxelmat.topopt.outline import extend, staircase_distance, void_distance, void_fill
from voxelmat.topopt.quantise import quantise
from voxelmat.topopt.unknowns import Fields, Unknowns

__all__ = ["assemble"]

Array = NDArray[np.float64]

_FARTHEST = 127  # steps of the stored distance


def assemble(
    part: Part, unknowns: Unknowns, fields: Fields, levels: int
) -> tuple[Part, Array, float]:
    """The designed part.

    Parameters
    ----------
    part : Part
        What was designed on.
    unknowns : Unknowns
    fields : Fields
        Of the last whole design.
    levels : int
        Blends in the palette, at most (kept ones come on top).

    Returns
    -------
    part : Part
    w : ndarray, (K, nz, ny, nx)
        Fractions after rounding to the palette.
    error : float
        Largest change of a fraction by that rounding.
    """
    domain = unknowns.choice.domain
    distance, occupancy = _outline(part, unknowns, fields)
    solid = occupancy > 0
    inside = domain & solid
    # Where only pure resins may be printed, each voxel becomes the resin it has most of.
    w = purest(fields.w) if unknowns.blending.pure else fields.w.copy()
    rounded = quantise(
        np.ascontiguousarray(w[:, inside].T),
        occupancy[inside].astype(np.float64),
        fields.blend.shear[solid[domain]],
        levels,
    )
    w[:, inside] = rounded.table[rounded.index].T
    labels, palette = _labels(part, unknowns.palette.names, inside, solid, rounded.table,
                              rounded.index)  # fmt: skip
    new = part.replace(
        palette=palette,
        labels=labels.T,
        distance=distance.T if distance is not None else None,
        occupancy=occupancy.T,
        bodies={name: mask & solid.T for name, mask in part.bodies.items()},
        name=f"{part.name} designed",
    )
    error = rounded.error
    if unknowns.blending.pure:
        error = float(np.abs(w - fields.w)[:, inside].max())
    return new, w, error


def _labels(
    part: Part,
    names: tuple[str, ...],
    inside: NDArray[np.bool_],
    solid: NDArray[np.bool_],
    table: Array,
    index: NDArray[np.intp],
) -> tuple[NDArray[np.uint16], tuple[Blend, ...]]:
    """Labels (nz, ny, nx) and the palette: kept blends first, then those of the design."""
    old = np.ascontiguousarray(part.labels.T)
    kept = solid & ~inside
    used = np.unique(old[kept])
    palette = [EMPTY, *(part.palette[n] for n in used)]
    number = np.zeros(len(part.palette), dtype=np.uint16)
    number[used] = np.arange(1, len(used) + 1)
    place = {blend: n for n, blend in enumerate(palette)}
    mine = np.empty(len(table), dtype=np.uint16)
    for row, fractions in enumerate(table):
        blend = Blend.of(zip(names, (float(f) for f in fractions), strict=True))
        if blend not in place:
            place[blend] = len(palette)
            palette.append(blend)
        mine[row] = place[blend]
    labels = np.zeros(old.shape, dtype=np.uint16)
    labels[kept] = number[old[kept]]
    labels[inside] = mine[index]
    return labels, tuple(palette)


def _outline(
    part: Part, unknowns: Unknowns, fields: Fields
) -> tuple[NDArray[np.int8] | None, NDArray[np.uint8]]:
    """Distance and occupancy, (nz, ny, nx): the shape's joined with the voids'."""
    shape_fill = np.ascontiguousarray(part.fill.T, dtype=np.float64)
    shape_distance = None if part.distance is None else np.ascontiguousarray(part.distance.T)
    if unknowns.void is None:
        return shape_distance, np.rint(255.0 * shape_fill).astype(np.uint8)
    h = part.grid.spacing
    unit = min(h) / DISTANCE_STEPS
    reach = _FARTHEST * unit
    kept = unknowns.choice.kept_mu > 0
    density = np.where(kept, 1.0, fields.filtered)
    density = extend(density, unknowns.choice.domain | kept, h)
    void = void_distance(density, unknowns.outline_level, h, reach)
    fill = shape_fill * np.where(kept, 1.0, void_fill(void, density, h))
    void[kept] = -reach
    if shape_distance is None:
        shape = staircase_distance(shape_fill > 0, h, reach)
    else:
        shape = shape_distance.astype(np.float64) * unit
    steps = np.rint(np.maximum(shape, void) / unit)
    distance = np.clip(steps, -_FARTHEST, _FARTHEST).astype(np.int8)
    return distance, np.rint(255.0 * fill).astype(np.uint8)

"""Material rules of a design applied to a part: blends, gradients, strokes, kept parts."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.io.store import load_part
from voxelmat.model.blend import Blend
from voxelmat.model.design import Design, LayoutEntry
from voxelmat.model.part import Part
from voxelmat.model.region import BodyRegion, Region
from voxelmat.workflow.painting import laid_from, painted
from voxelmat.workflow.regions import at_key, box_words, region_for, whole_part
from voxelmat.workflow.strokes import connected, holding, stroked

__all__ = ["apply_layout", "distance_outside", "mixed"]

#: Steps of a gradient whose rule does not say.
_LEVELS = 32


def apply_layout(design: Design, part: Part) -> Part:
    """Apply the rules in order; later ones win. Bought-in bodies keep their material.

    Parameters
    ----------
    design : Design
    part : Part
        Its resins include every resin that the rules name.

    Returns
    -------
    Part
        With the palette entries that occur, and no others.

    Raises
    ------
    InputError
        Naming file and key, if a rule's region holds no printed voxel.
    """
    if not design.layout:
        return part
    for i, rule in enumerate(design.layout):
        with at_key(design, f"layout[{i}]"):
            region = whole_part() if rule.region is None else _region(rule.region, design, part)
            voxels = _printed(region, part)
            if not voxels.any():
                raise InputError(
                    f"Region '{region.name}' holds no printed voxel, so this rule does nothing: "
                    f"{box_words(part)}."
                )
            part = _ruled(rule, design, part, voxels)
    return _compact(part)


def _ruled(rule: LayoutEntry, design: Design, part: Part, voxels: NDArray[np.bool_]) -> Part:
    """The part after one rule."""
    settings = rule.settings
    if rule.kind == "stored":
        return laid_from(part, voxels, load_part(design.file(settings["file"]), part.law))
    share: NDArray[np.float64] | None = None
    if rule.kind == "stroke":
        voxels, share = stroked(part.grid, settings, voxels)
    elif rule.kind == "fill":
        voxels = connected(part, settings["at_mm"], settings.get("axis"), voxels)
    elif rule.kind == "replace":
        voxels = voxels & holding(part, Blend.of(settings["old"]))
    elif rule.kind != "blend":
        share = _share(rule.kind, settings, design, part, voxels)
    if share is None or "blend" in settings:
        steps = np.zeros(int(voxels.sum()), dtype=np.intp)
        return painted(part, voxels, steps, [Blend.of(settings["blend"])])
    levels = settings.get("levels", _LEVELS)
    low, high = Blend.of(settings["from"]), Blend.of(settings["to"])
    blends = [mixed(low, high, s / (levels - 1)) for s in range(levels)]
    return painted(part, voxels, np.rint(share * (levels - 1)).astype(np.intp), blends)


def _printed(region: Region, part: Part) -> NDArray[np.bool_]:
    """Printed voxels of a region; thin edges, which take no part in a solve, are among them."""
    whole = part.replace(occupancy=None)
    return region.voxels(whole) & part.printed_labels()[part.labels]


def _region(name: str, design: Design, part: Part) -> Region:
    for entry in design.regions:
        if entry.name == name:
            return region_for(entry, design, part)
    return BodyRegion(name=name, body=name)


def mixed(first: Blend, second: Blend, share: float) -> Blend:
    """The blend a `share` (0 to 1) of the way from `first` to `second`."""
    names = {n for b in (first, second) for n, _ in b.fractions}
    return Blend.of(
        {n: (1 - share) * first.fraction(n) + share * second.fraction(n) for n in names}
    )


def _share(
    kind: str,
    settings: Mapping[str, Any],
    design: Design,
    part: Part,
    voxels: NDArray[np.bool_],
) -> NDArray[np.float64]:
    """How far from 'from' to 'to' each of the voxels lies, 0 to 1."""
    start, end = settings["range_mm"]
    if kind == "axis gradient":
        axis = "xyz".index(settings["axis"])
        at = part.grid.centres()[axis][np.nonzero(voxels)[axis]]
    else:
        origin = _region(settings["from_region"], design, part)
        held = origin.voxels(part)
        if not held.any():
            raise InputError(
                f"Region '{origin.name}', which distance counts from, holds no voxel of the part: "
                f"{box_words(part)}."
            )
        at = distance_outside(held, part.grid.spacing, voxels)
    return np.asarray(np.clip((at - start) / (end - start), 0.0, 1.0))


def distance_outside(
    held: NDArray[np.bool_],
    spacing: tuple[float, float, float],
    where: NDArray[np.bool_],
) -> NDArray[np.float64]:
    """Distance of voxel centres from the outside of a set of voxels, mm; 0 within the set.

    Measured between centres, less what of the way lies in the set's own voxel: exact along an
    axis, else good to half a voxel.

    Parameters
    ----------
    held : ndarray of bool, shape (nx, ny, nz)
        The set; not empty.
    spacing : tuple of float
        mm.
    where : ndarray of bool, shape (nx, ny, nz)
        Voxels to answer for.

    Returns
    -------
    ndarray, shape (n,)
        For the voxels of `where`, in index order.
    """
    from scipy import ndimage

    nearest = ndimage.distance_transform_edt(
        ~held, sampling=spacing, return_distances=False, return_indices=True
    )
    size = np.asarray(spacing)[:, None]
    step = np.abs(np.array(np.nonzero(where)) - nearest[:, where])
    between = np.sqrt(((step * size) ** 2).sum(axis=0))
    # Along the way the set's voxel reaches half a voxel in the axis that has most steps.
    most = step.max(axis=0)
    return np.asarray(between * (1.0 - 0.5 / np.maximum(most, 1)) * (most > 0))


def _compact(part: Part) -> Part:
    """Drop palette entries that no voxel has."""
    used = np.flatnonzero(np.bincount(part.labels.ravel(order="F"), minlength=1))
    kept = [0, *(int(u) for u in used if u)]
    if len(kept) == len(part.palette):
        return part
    table = np.zeros(len(part.palette), dtype=np.uint16)
    table[kept] = np.arange(len(kept))
    return part.replace(palette=tuple(part.palette[i] for i in kept), labels=table[part.labels])

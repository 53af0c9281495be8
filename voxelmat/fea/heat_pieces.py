"""Pieces of a part that a steady temperature is determined for: the heat has somewhere to go."""

from __future__ import annotations

import numpy as np
import scipy.ndimage
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.heat_assemble import HeatActs
from voxelmat.fea.operator import touched_nodes
from voxelmat.model.part import Part

__all__ = ["hinges", "kept"]

Bools = NDArray[np.bool_]

# Pieces named one by one in a caution.
_NAMED = 3


def _box(part: Part, slices: tuple[slice, ...], voxels: int) -> str:
    words = []
    for axis, s in zip("xyz", slices[::-1], strict=True):
        d = "xyz".index(axis)
        low, h = part.grid.origin[d], part.grid.spacing[d]
        words.append(f"{axis} {low + h * s.start:.4g} to {low + h * s.stop:.4g}")
    return f"{', '.join(words)} mm ({voxels} voxels)"


def hinges(solid: Bools) -> list[str]:
    """A caution where pieces of ``[k, j, i]`` meet along edges or at corners alone."""
    apart = int(scipy.ndimage.label(solid)[1])
    joined = int(scipy.ndimage.label(solid, np.ones((3, 3, 3), dtype=bool))[1])
    if apart == joined:
        return []
    return [
        f"{apart - joined} joints between pieces are edges or corners of voxels only. Heat passes "
        f"there as through a bridge about a voxel thick, which the real part may not have."
    ]


def kept(part: Part, solid: Bools, acts: HeatActs) -> tuple[Bools, list[str]]:
    """Voxels ``[nz, ny, nx]`` whose steady temperature something determines.

    Parameters
    ----------
    part : Part
        For places.
    solid : ndarray of bool, shape (nz, ny, nx)
    acts : HeatActs

    Returns
    -------
    keep : ndarray of bool
    cautions : list of str
        On pieces left out.

    Raises
    ------
    InputError
        Where the part is empty, nothing holds the temperature, or heat flows into a piece that
        it cannot leave.
    """
    if not solid.any():
        raise InputError("The part is empty: no voxel holds material.")
    if not acts.held.any() and not acts.films:
        raise InputError(
            "No temperature is fixed and no surface has a film, so heat cannot leave and a steady "
            "temperature does not exist or is not determined. Fix a temperature, add a "
            "convection, or compute the heating over time."
        )
    # Pieces that share but a corner share its temperature, so neighbours of all kinds count.
    labels, count = scipy.ndimage.label(solid, np.ones((3, 3, 3), dtype=bool))
    film, heat = acts.film(), np.zeros(acts.held.size)
    for flow in acts.inflows:
        np.add.at(heat, flow.node, np.abs(flow.heat))
    hold = acts.held if film is None else acts.held | (film > 0)
    heated = heat.reshape(hold.shape) > 0
    cold: list[tuple[int, str]] = []
    for n, box in enumerate(scipy.ndimage.find_objects(labels), start=1):
        nodes = touched_nodes(labels[box] == n)
        at = tuple(slice(s.start, s.stop + 1) for s in box)
        if np.any(nodes & hold[at]):
            continue
        voxels = int((labels[box] == n).sum())
        place = _box(part, box, voxels)
        if np.any(nodes & heated[at]):
            raise InputError(
                f"Heat flows into a piece of the part that it cannot leave: no temperature is "
                f"fixed on it and no surface of it has a film. It spans {place}. Add one of them, "
                f"join it to the rest, or compute the heating over time."
            )
        cold.append((n, place))
    if not cold:
        return solid, []
    if len(cold) == count:
        raise InputError("No fixed temperature and no film acts on a node of the part.")
    where = "; ".join(place for _, place in cold[:_NAMED])
    more = "; and others" if len(cold) > _NAMED else ""
    caution = (
        f"{len(cold)} pieces that no heat reaches were left out; they have no temperature: "
        f"{where}{more}."
    )
    return solid & ~np.isin(labels, [n for n, _ in cold]), [caution]

"""The worst places of the interfaces between resins, in clusters apart from each other."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.model.interface import InterfaceResult, InterfaceSpot, find_bond

__all__ = ["worst_interfaces"]


def _severity(found: InterfaceResult) -> NDArray[np.float64]:
    """What places are ranked by: use of strength; for pairs without a record, MPa of traction."""
    plain = np.hypot(np.maximum(found.normal, 0.0), found.shear)
    return np.where(np.isnan(found.utilisation), plain, found.utilisation)


def worst_interfaces(
    found: InterfaceResult, count: int = 5, *, radius: float | None = None
) -> tuple[InterfaceSpot, ...]:
    """The worst places of each pair of resins, apart from each other.

    Parameters
    ----------
    found : InterfaceResult
    count : int
        Most places a pair.
    radius : float, optional
        Faces nearer than this (mm) to a worst one belong to its cluster; 4 face widths where
        left out.

    Returns
    -------
    tuple of InterfaceSpot
        Pairs with a record first, by falling use of strength; then the others by traction.
    """
    score = _severity(found)
    spots = []
    if radius is None:
        radius = 4.0 * float(np.sqrt(found.area.max())) if len(found) else 0.0
    pairs = np.sort(found.pair, axis=1)
    for pair in np.unique(pairs, axis=0):
        mine = np.flatnonzero((pairs == pair).all(axis=1) & found.solid_sides)
        left = mine[np.argsort(-score[mine], kind="stable")]
        for _ in range(count):
            if not len(left):
                break
            near = np.linalg.norm(found.centre[left] - found.centre[left[0]], axis=1) <= radius
            spots.append(_spot(found, int(left[0]), left[near]))
            left = left[~near]
    return tuple(sorted(spots, key=_rank))


def _rank(spot: InterfaceSpot) -> tuple[bool, float]:
    known = spot.utilisation == spot.utilisation
    return not known, -spot.utilisation if known else -float(
        np.hypot(max(spot.normal, 0.0), spot.shear)
    )


def _spot(found: InterfaceResult, face: int, cluster: NDArray[np.intp]) -> InterfaceSpot:
    x, y, z = (float(c) for c in found.centre[face])
    names = found.names(face)
    area = found.area[cluster]
    bond = find_bond(found.bonds, *names)
    return InterfaceSpot(
        resins=names,
        place_mm=(x, y, z),
        normal=float(found.normal[face]),
        shear=float(found.shear[face]),
        utilisation=float(found.utilisation[face]),
        utilisation_low=float(found.utilisation_low[face]),
        utilisation_high=float(found.utilisation_high[face]),
        jump=float(found.jump[face]),
        mean_utilisation=float(np.average(found.utilisation[cluster], weights=area)),
        stepped=bool(found.stepped[face]),
        at_edge=bool(found.at_edge[face]),
        indicative=bond is not None and bond.indicative,
        area_mm2=float(area.sum()),
    )

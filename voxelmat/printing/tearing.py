"""Thin soft walls that cleaning would tear, because support sticks to them.

The rule is ours: a wall of blends up to `SOFT_MODULUS` is a finding where it is thinner than
`TEAR_BOTH` mm with support on both of two opposite sides, or thinner than `TEAR_ONE` mm with
support on one side.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from voxelmat.model.finding import Finding
from voxelmat.printing.ballscreen import thin_sites
from voxelmat.printing.measure import deepest_of, width_at
from voxelmat.printing.support import SupportFill
from voxelmat.printing.zones import SOFT_MODULUS, Zones
from voxelmat.units import quantity

__all__ = ["TEAR_BOTH", "TEAR_ONE", "tearing_findings"]

TEAR_BOTH = 1.0
TEAR_ONE = 0.5
_LEAST = 4  # voxel faces that touch support
_BALANCE = 0.25  # the lesser of two opposite sides over the larger
_MEASURED = 12  # of the pieces that may tear, those that touch support most
_NAMED = 3


def tearing_findings(zones: Zones, fill: SupportFill | None) -> list[Finding]:
    """Soft walls that support would tear when it is taken off.

    Parameters
    ----------
    zones : Zones
    fill : SupportFill or None
        The support that is drawn, or an assumption of what the machine draws; None for none.

    Returns
    -------
    list of Finding
        Code "support tears soft wall"; nothing where the voxels are too coarse to tell, which is
        `TEAR_BOTH` and above.
    """
    found: list[Finding] = []
    soft = zones.soft
    support = zones.support(fill)
    if not soft.any() or not support.any():
        return found
    z, y, x = (math.ceil(TEAR_BOTH / h - 1e-9) for h in zones.spacing)
    if min(z, y, x) < 2:
        return found
    pieces, _ = ndimage.label(thin_sites(zones.solid, (z, y, x)) & soft)
    faces = _faces(pieces, support)
    touching = faces.sum(axis=(1, 2))
    for number in np.argsort(-touching, kind="stable")[:_MEASURED]:
        if touching[number] >= _LEAST:
            at = _deepest(zones, np.argwhere(pieces == number))
            found += _finding(zones, at, faces[number])
    return found[:_NAMED]


def _faces(pieces: NDArray[Any], support: NDArray[np.bool_]) -> NDArray[np.int64]:
    """Faces of each piece that touch support, ``[piece, axis, side]``."""
    count = np.zeros((int(pieces.max()) + 1, 3, 2), np.int64)
    for axis in range(3):
        p, s = (np.moveaxis(v, axis, 0) for v in (pieces, support))
        for side, (here, there) in enumerate((((p[1:]), s[:-1]), (p[:-1], s[1:]))):
            count[:, axis, side] = np.bincount(here[there], minlength=len(count))
    count[0] = 0
    return count


def _deepest(zones: Zones, voxels: NDArray[np.int64]) -> tuple[int, int, int]:
    """The voxel of a piece farthest from empty space."""
    low = np.maximum(voxels.min(axis=0) - 2, 0)
    cut = tuple(slice(a, b + 3) for a, b in zip(low, voxels.max(axis=0), strict=True))
    depth = ndimage.distance_transform_edt(np.pad(zones.solid[cut], 1), sampling=zones.spacing)
    return deepest_of(voxels, depth[tuple((voxels - low + 1).T)])


def _finding(zones: Zones, at: tuple[int, int, int], faces: NDArray[np.int64]) -> Iterator[Finding]:
    """Measure a wall and judge it by the support on the two sides that it is thin between."""
    reach = [int(2 * TEAR_BOTH / h) + 2 for h in zones.spacing]
    low = [max(0, a - n) for a, n in zip(at, reach, strict=True)]
    block = zones.solid[tuple(slice(b, a + n + 1) for a, b, n in zip(at, low, reach, strict=True))]
    here = (at[0] - low[0], at[1] - low[1], at[2] - low[2])
    thickness, normal = width_at(block, here, zones.spacing)
    less, more = sorted(faces[int(np.abs(normal).argmax())])
    both = less >= max(_LEAST, _BALANCE * more)
    limit = TEAR_BOTH if both else TEAR_ONE
    if more < _LEAST or thickness >= limit:
        return
    sides = "both sides" if both else "one side"
    yield Finding(
        severity="warn",
        code="support tears soft wall",
        message=f"A wall of {quantity(thickness, 'mm')} of a blend of "
        f"{quantity(float(zones.modulus[at]), 'MPa')} has support on {sides}; taking it off may "
        f"tear it. From {limit:g} mm on, or above {SOFT_MODULUS:g} MPa, it would be left alone.",
        place_mm=zones.place(at),
        remedy="Thicken the wall, turn the part so that it stands free, or wash the support out.",
        value=thickness,
        limit=limit,
        unit="mm",
    )

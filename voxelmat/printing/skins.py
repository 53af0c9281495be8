"""Skins of one stiffness over another that are thinner than a few droplets.

Judged along each axis on the intended zones of the design, never on droplets of a halftone: a run
of rigid voxels that lies directly on a soft blend, and that ends in soft or in the open. A skin is
a finding where it is thinner than `SKIN_DROPLETS` droplets along that axis over a patch more than
twice as wide (and three voxels), so that the feather edge of a sound zone is none. The rule is
ours.
"""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from voxelmat.model.finding import Finding
from voxelmat.printing.zones import Zones
from voxelmat.units import quantity

__all__ = ["SKIN_DROPLETS", "skin_findings"]

SKIN_DROPLETS = 6
_NAMED = 3
_ALONG = ("layers", "rows", "columns")

Bools = NDArray[np.bool_]


def skin_findings(zones: Zones, droplets: int = SKIN_DROPLETS) -> list[Finding]:
    """Rigid skins over soft blends, and soft skins over rigid ones.

    Parameters
    ----------
    zones : Zones
    droplets : int
        Fewest droplets across a skin.

    Returns
    -------
    list of Finding
        Codes "thin rigid skin" (warn) and "thin soft skin" (note).
    """
    rigid, soft = zones.rigid, zones.soft
    return [
        *_skins(zones, rigid, soft, droplets, "rigid")[:_NAMED],
        *_skins(zones, soft, rigid, droplets, "soft")[:_NAMED],
    ]


def _skins(zones: Zones, skin: Bools, base: Bools, droplets: int, kind: str) -> list[Finding]:
    found: list[Finding] = []
    if not skin.any() or not base.any():
        return found
    for axis in range(3):
        limit = droplets * zones.pitch[axis]
        s, b, solid = (np.moveaxis(v, axis, 0) for v in (skin, base, zones.solid))
        fill = np.moveaxis(zones.fill, axis, 0)
        thickness = _runs(s, b, solid, fill, zones.spacing[axis], limit)
        across = [h for m, h in enumerate(zones.spacing) if m != axis]
        pieces, _ = ndimage.label(thickness > 0, np.ones((3, 3, 3)))
        for number, cut in enumerate(ndimage.find_objects(pieces), 1):
            piece = pieces[cut] == number
            core = _patch(piece.any(axis=0), [max(3, 2 * math.ceil(limit / h) + 1) for h in across])
            if core.any():
                voxel = _middle(piece, core, cut)
                value = float(np.median(thickness[cut][piece]))
                found += _finding(zones, axis, voxel, value, limit, droplets, kind)
    return found


def _runs(
    skin: Bools, base: Bools, solid: Bools, fill: NDArray[np.float32], edge: float, limit: float
) -> NDArray[np.float32]:
    """Thickness of every run along the first axis that is a thin skin; 0 elsewhere."""
    out = np.zeros(skin.shape, np.float32)
    pad = [(1, 1), (0, 0), (0, 0)]
    s, b = np.pad(skin, pad), np.pad(base, pad)
    open_ = ~np.pad(solid, pad)
    n = len(skin)
    for m in range(1, int(limit / edge) + 3):
        if m > n:
            break
        whole = s[1 : n - m + 2].copy()
        thick = np.zeros(whole.shape, np.float32)
        for q in range(m):
            whole &= s[1 + q : n - m + 2 + q]
            thick += fill[q : n - m + 1 + q] * np.float32(edge)
        before, after = slice(0, n - m + 1), slice(m + 1, n + 2)
        held = (b[before] & (b[after] | open_[after])) | (open_[before] & b[after])
        hit = whole & held & (thick < limit * (1 - 1e-6))
        for q in range(m):
            part = out[q : n - m + 1 + q]
            part[hit] = thick[hit]
    return out


def _patch(flat: Bools, size: list[int]) -> Bools:
    """Where a patch of so many voxels fits."""
    room = np.pad(flat, 1)
    core = ndimage.binary_erosion(room, np.ones(size, dtype=np.bool_))
    return np.asarray(core[1:-1, 1:-1])


def _middle(piece: Bools, core: Bools, cut: tuple[slice, ...]) -> tuple[int, int, int]:
    """A voxel of a piece in the middle of its widest patch."""
    depth = ndimage.distance_transform_edt(np.pad(core, 1))[1:-1, 1:-1]
    r, c = (int(v) for v in np.unravel_index(int(depth.argmax()), core.shape))
    k = int(np.flatnonzero(piece[:, r, c]).mean())
    return (cut[0].start + k, cut[1].start + r, cut[2].start + c)


def _finding(
    zones: Zones,
    axis: int,
    voxel: tuple[int, int, int],
    value: float,
    limit: float,
    droplets: int,
    kind: str,
) -> Iterator[Finding]:
    rest = iter(voxel[1:])
    order = tuple(voxel[0] if m == axis else next(rest) for m in range(3))
    other = "soft" if kind == "rigid" else "rigid"
    count = value / zones.pitch[axis]
    yield Finding(
        severity="warn" if kind == "rigid" else "note",
        code=f"thin {kind} skin",
        message=f"A {kind} skin of {quantity(value, 'mm')} lies on a {other} blend: {count:.2g} "
        f"droplets along {_ALONG[axis]}, and {droplets} make it closed.",
        place_mm=zones.place(order),
        remedy="Thicken the skin, or blend it into what lies below.",
        value=value,
        limit=limit,
        unit="mm",
    )

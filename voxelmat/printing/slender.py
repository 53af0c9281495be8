"""Slender soft features that a leveller could drag while they are printed.

The rule is ours. A feature that stands free, of height h and thickness t (mm) and Young's modulus
E (MPa), bends under a drag on its top by an amount that goes with (h / t)^3 / E, as a cantilever
does; it is a finding where that exceeds `DRAG_LIMIT`: h / t above 5 at 1 MPa, 23 at 100 MPa, 63 at
2000 MPa. A feature is a chain of pieces of layers, each above one and below one; it ends where it
joins another or grows thicker than `THICKEST`. Support beside a quarter of its faces holds it.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from voxelmat.model.finding import Finding
from voxelmat.printing.support import SupportFill
from voxelmat.printing.zones import Zones
from voxelmat.units import quantity

__all__ = ["DRAG_LIMIT", "THICKEST", "slender_findings"]

DRAG_LIMIT = 125.0  # 1 / MPa
THICKEST = 4.0  # mm
_HELD = 0.25
_NAMED = 3

Bools = NDArray[np.bool_]


@dataclass(slots=True)
class _Chain:
    """Pieces of layers on top of each other."""

    layers: int = 0
    voxels: int = 0
    stiffness: float = 0.0
    thickness: float = 0.0
    rim: int = 0
    held: int = 0
    top: tuple[int, int, int] = (0, 0, 0)

    def figures(self, layer: float) -> tuple[float, float, float, float]:
        """Height, thickness, modulus, and (h / t)^3 / E."""
        height, thick = self.layers * layer, self.thickness / self.layers
        modulus = self.stiffness / self.voxels
        return height, thick, modulus, (height / thick) ** 3 / modulus


def slender_findings(zones: Zones, fill: SupportFill | None) -> list[Finding]:
    """Free-standing features that are too tall for their thickness and stiffness.

    Parameters
    ----------
    zones : Zones
    fill : SupportFill or None
        The support that is drawn; None for none.

    Returns
    -------
    list of Finding
        Code "slender feature"; the value is the height over the thickness.
    """
    support = zones.support(fill)
    below: dict[int, _Chain] = {}
    earlier: NDArray[Any] = np.zeros(zones.solid.shape[1:], np.int32)
    done: list[_Chain] = []
    for k in range(len(zones.solid)):
        pieces, n = ndimage.label(zones.solid[k])
        here = _layer(zones, support[k], pieces, n, k)
        links = _links(earlier, pieces)
        above, under = Counter(a for a, _ in links), Counter(b for _, b in links)
        on = {a: b for a, b in links if above[a] == 1 and under[b] == 1}
        for number, chain in below.items():
            other = on.get(number)
            if other is not None and other in here:
                _extend(chain, here[other])
                here[other] = chain
            else:
                done.append(chain)
        below, earlier = here, pieces
    done += below.values()
    return _findings(zones, done)


def _links(earlier: NDArray[Any], pieces: NDArray[Any]) -> list[tuple[int, int]]:
    """Pairs of pieces of two layers that overlap."""
    both = (earlier > 0) & (pieces > 0)
    n = int(pieces.max()) + 1
    codes = np.unique(earlier[both].astype(np.int64) * n + pieces[both])
    return [(int(c) // n, int(c) % n) for c in codes]


def _layer(zones: Zones, support: Bools, pieces: NDArray[Any], n: int, k: int) -> dict[int, _Chain]:
    """The pieces of one layer that are thin and have a known modulus."""
    if n == 0:
        return {}
    solid = np.pad(zones.solid[k], 1)
    depth = ndimage.distance_transform_edt(solid, sampling=zones.spacing[1:])[1:-1, 1:-1]
    numbers = np.arange(1, n + 1)
    deepest = ndimage.maximum_position(depth, pieces, numbers)
    rim = pieces * (depth < 1.01 * max(zones.spacing[1:]))
    beside = ndimage.binary_dilation(support)
    voxels, edges, held = (
        np.bincount(v.ravel(), minlength=n + 1) for v in (pieces, rim, rim * beside)
    )
    stiff = np.bincount(pieces.ravel(), zones.modulus[k].ravel(), minlength=n + 1)
    out = {}
    for number, (r, c) in zip(numbers, deepest, strict=True):
        thick = 2 * float(depth[r, c]) - 0.5 * min(zones.spacing[1:])
        if thick < THICKEST and stiff[number] > 0:
            out[int(number)] = _Chain(
                1, int(voxels[number]), float(stiff[number]), thick, int(edges[number]),
                int(held[number]), (k, int(r), int(c)),
            )  # fmt: skip
    return out


def _extend(chain: _Chain, piece: _Chain) -> None:
    for name in ("layers", "voxels", "stiffness", "thickness", "rim", "held"):
        setattr(chain, name, getattr(chain, name) + getattr(piece, name))
    chain.top = piece.top


def _findings(zones: Zones, chains: list[_Chain]) -> list[Finding]:
    bad = []
    for chain in chains:
        height, thick, modulus, drag = chain.figures(zones.spacing[0])
        if drag > DRAG_LIMIT and chain.held < _HELD * chain.rim:
            bad.append((drag, height, thick, modulus, chain.top))
    bad.sort(reverse=True)
    found = []
    for _, height, thick, modulus, top in bad[:_NAMED]:
        limit = (DRAG_LIMIT * modulus) ** (1 / 3)
        found.append(
            Finding(
                severity="warn",
                code="slender feature",
                message=f"A feature of {quantity(modulus, 'MPa')} stands free "
                f"{quantity(height, 'mm')} high and {quantity(thick, 'mm')} thick, "
                f"{height / thick:.2g} to 1; the leveller may drag it from {limit:.2g} to 1 on "
                f"({len(bad)} such features in all).",
                place_mm=zones.place(top),
                remedy="Lay it down, thicken it, tie it to its neighbours, or support its sides.",
                value=height / thick,
                limit=limit,
            )
        )
    return found

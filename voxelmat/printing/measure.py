"""One feature of a stack measured on its droplet sites: how thick, along what, and of what kind."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from voxelmat.printing.ballscreen import thin_sites

__all__ = ["Measured", "deepest_of", "image_sizes", "measure", "width_at"]

Bools = NDArray[np.bool_]
Sites = tuple[int, int, int]
Triple = tuple[float, float, float]
#: A cross-section more than so many times as long as thick makes a wall (or a gap), else a strut
#: (or a hole). Ours.
_WALL_RATIO = 2.0


@dataclass(frozen=True, slots=True)
class Measured:
    """A feature at its thickest place near the one that was asked for.

    Attributes
    ----------
    thickness : float
        mm, to about one site.
    normal : tuple of float
        Unit vector across it, along layers, rows and columns.
    at : tuple of int
        Site in the block.
    flat : bool
        True for a wall or gap, False for a strut or hole.
    along : tuple of float
        Unit vector along its longest direction: the way that a strut or hole runs.
    """

    thickness: float
    normal: Triple
    at: Sites
    flat: bool
    along: Triple

    def allowed(self, limit: Triple) -> float:
        """The limit, mm, where it differs along layers, rows and columns.

        That of a wall or gap counts across it, that of a strut or hole the way it runs; see
        `voxelmat.model.minimum_sizes.MinimumSizes`.
        """
        way = self.normal if self.flat else self.along
        return math.sqrt(sum((a * b) ** 2 for a, b in zip(way, limit, strict=True)))

    def site(self, pitch: Triple) -> float:
        """Length of a site across it, mm."""
        return sum(abs(a) * p for a, p in zip(self.normal, pitch, strict=True))


def image_sizes(size: Triple, pitch: Triple) -> Sites:
    """A size in whole sites along layers, rows and columns, rounded down, at least 1."""
    layer, row, column = (max(1, int(s / p + 1e-9)) for s, p in zip(size, pitch, strict=True))
    return (layer, row, column)


def measure(block: Bools, at: Sites, limit: Triple, pitch: Triple) -> Measured | None:
    """Measure the thin feature that holds a site.

    Parameters
    ----------
    block : ndarray of bool, shape (layers, rows, columns)
        Round the site, at least four times the limit to each side.
    at : tuple of int
        A site that the screen for thin features named.
    limit, pitch : tuple of float
        mm, along layers, rows and columns.

    Returns
    -------
    Measured or None
        None where nothing thin is there after all.
    """
    thin = thin_sites(block, image_sizes(limit, pitch))
    pieces, _ = ndimage.label(thin)
    if pieces[at] == 0:
        return None
    depth = ndimage.distance_transform_edt(np.pad(block, 1), sampling=pitch)[1:-1, 1:-1, 1:-1]
    near = np.zeros_like(block)
    sizes = image_sizes(limit, pitch)
    near[tuple(slice(max(0, a - 2 * n), a + 2 * n + 1) for a, n in zip(at, sizes, strict=True))] = 1
    inside = np.where((pieces == pieces[at]) & near, depth, -1.0)
    sites = np.argwhere(inside > 0)
    deepest = deepest_of(sites, inside[tuple(sites.T)])
    thickness, normal = width_at(block, deepest, pitch)
    flat, along = _form(block, deepest, 1.5 * max(limit), pitch)
    return Measured(thickness, normal, deepest, flat, along)


def deepest_of(sites: NDArray[np.int64], depth: NDArray[np.float64]) -> Sites:
    """Of sites (n, 3) the deepest; of several as deep the one in their middle."""
    best = sites[depth >= 0.999 * depth.max()]
    off = best - best.mean(axis=0)
    z, y, x = (int(v) for v in best[int((off**2).sum(axis=1).argmin())])
    return (z, y, x)


def width_at(block: Bools, at: Sites, pitch: Triple) -> tuple[float, Triple]:
    """Width of what is set, mm, through a site towards its nearest unset one, and the direction.

    Followed both ways in steps of a tenth of the smallest pitch; what lies beyond the block is
    unset.
    """
    reach = [
        (max(0, a - n), a + n + 1)
        for a, n in zip(at, (2 + s // 2 for s in block.shape), strict=True)
    ]
    part = np.pad(block[tuple(slice(*r) for r in reach)], 1)
    centre = np.array([a - r[0] + 1 for a, r in zip(at, reach, strict=True)])
    empty = np.argwhere(~part)
    away = (empty - centre) * np.array(pitch)
    nearest = away[int(np.argmin((away**2).sum(axis=1)))]
    normal = nearest / np.linalg.norm(nearest)
    step = min(pitch) / 10
    length = 0.0
    for sign in (1, -1):
        n = 0
        while True:
            where = np.rint(centre + sign * n * step * normal / np.array(pitch)).astype(int)
            if (where < 0).any() or (where >= part.shape).any() or not part[tuple(where)]:
                break
            n += 1
        length += (n - 0.5) * step
    return length, (float(normal[0]), float(normal[1]), float(normal[2]))


def _form(block: Bools, at: Sites, radius: float, pitch: Triple) -> tuple[bool, Triple]:
    """Whether the piece round a site is long in two directions rather than one, and the longest."""
    reach = [int(radius / p) for p in pitch]
    low = [max(0, a - n) for a, n in zip(at, reach, strict=True)]
    cut = tuple(slice(b, a + n + 1) for a, b, n in zip(at, low, reach, strict=True))
    here = tuple(a - b for a, b in zip(at, low, strict=True))
    pieces, _ = ndimage.label(block[cut])
    points = (np.argwhere(pieces == pieces[here]) - here) * np.array(pitch)
    points = points[(points**2).sum(axis=1) <= radius**2]
    if len(points) < 4:
        return False, (1.0, 0.0, 0.0)
    size, ways = np.linalg.eigh(np.cov(points.T))
    spread = np.sqrt(np.clip(size, 1e-12, None))
    z, y, x = (float(v) for v in ways[:, 2])
    return bool(spread[1] > _WALL_RATIO * spread[0]), (z, y, x)

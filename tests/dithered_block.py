"""A block of one blend, or a linear ramp, sliced to about a hundred sites a side; its windows."""

import numpy as np
from print_twins import resin

from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.halftone import Halftone
from voxelmat.model.part import Part
from voxelmat.printing.halftone import Slicer
from voxelmat.printing.place import place
from voxelmat.printing.profile import load_profile
from voxelmat.printing.support import outline_box

SIDE = 144
#: The sets of fractions of the gates.
BLENDS = {
    "1/64": (1 / 64, 63 / 64),
    "1/16": (1 / 16, 15 / 16),
    "1/8": (1 / 8, 7 / 8),
    "1/4": (1 / 4, 3 / 4),
    "1/3": (1 / 3, 2 / 3),
    "1/2": (1 / 2, 1 / 2),
    "2/3": (2 / 3, 1 / 3),
    "1/3, 1/3, 1/3": (1 / 3, 1 / 3, 1 / 3),
    ".1, .3, .6": (0.1, 0.3, 0.6),
    "ramp": None,
}
_LEVELS = 17


def _blends(fractions):
    if fractions is None:
        first = np.linspace(0.02, 0.98, _LEVELS)
        return [Blend.of({"r0": f, "r1": 1 - f}) for f in first]
    return [Blend.of({f"r{m}": f for m, f in enumerate(fractions)})]


def block(name, method, seed=3):
    """Material numbers ``[layer, row, column]`` and each resin's fraction along a row.

    Invented resins, stiff to soft, on an invented profile.
    """
    blends = _blends(BLENDS[name])
    profile = load_profile("invented-standard")
    pitch = [float(p) for p in (profile.pitch_x, profile.pitch_y, profile.layer)]
    n = max(len(blends), 2)
    grid = VoxelGrid(
        shape=(n, 2, 2), spacing=(SIDE * pitch[0] / n, SIDE * pitch[1] / 2, SIDE * pitch[2] / 2)
    )
    labels = np.empty(grid.shape, np.uint16)
    labels[:] = (np.arange(n) * len(blends) // n + 1)[:, None, None]
    names = sorted({r for b in blends for r, _ in b.fractions})
    part = Part(
        grid=grid,
        resins=tuple(resin(r, 1000.0 / 10**m) for m, r in enumerate(names)),
        palette=(EMPTY, *blends),
        labels=labels,
    )
    raster = place(outline_box(part), profile)
    slicer = Slicer(
        part, raster, tuple(names), support=False, seed=seed, halftone=Halftone(method=method)
    )
    layers, _, columns = raster.image_shape
    sites = np.stack([s[:, :columns].copy() for s in slicer.sites(0, layers)])
    at = np.clip(raster.image_index(grid, 2), 0, n - 1)
    table = np.array([[b.fraction(r) for r in names] for b in blends])
    table = table if len(blends) > 1 else np.repeat(table, n, axis=0)
    return sites, np.array([np.interp(at, np.arange(n), column) for column in table.T])


def window_errors(found, fraction, size, edge=4):
    """Mean error in inner cubes of `size` sites, off the borders of the mask's tiles."""
    counts = [(n - 2 * edge) // size for n in found.shape]
    cut = tuple(slice(edge, edge + c * size) for c in counts)
    error = (found[cut] - fraction[cut[2]]).reshape(
        counts[0], size, counts[1], size, counts[2], size
    )
    return error.mean(axis=(1, 3, 5))


def statistics(sites, fractions):
    """The worst over the resins: rms and greatest error in cubes of 8 and 16 sites, and volume.

    Volume is judged over 64 layers of 128 x 128 sites.
    """
    worst = np.zeros(4)
    for m, fraction in enumerate(fractions):
        found = (sites == m + 1).astype(np.float32)
        small, large = (window_errors(found, fraction, size) for size in (8, 16))
        cut = found[9:73, 8:136, 8:136]
        row = (
            np.sqrt((small**2).mean()),
            abs(small).max(),
            np.sqrt((large**2).mean()),
            abs(cut.mean(dtype=np.float64) - fraction[8:136].mean()),
        )
        worst = np.maximum(worst, row)
    return dict(zip(("rms8", "max8", "rms16", "volume"), worst.tolist(), strict=True))

"""Slow NumPy twins of the slicing kernels, and small invented parts for the printing tests."""

import numpy as np

from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.material import Constant, Material
from voxelmat.model.part import Part
from voxelmat.printing import mask as mask_module
from voxelmat.printing.support import column_support, outline_field


def resin(name, E=100.0, kind="rigid", density=1.15e-9):
    """An invented resin."""
    return Material(
        name=name,
        kind=kind,
        E=Constant(value=E, unit="MPa"),
        nu=Constant(value=0.4),
        density=Constant(value=density, unit="tonne/mm3"),
    )


HARD, SOFT, MID = resin("hard", 2000.0), resin("soft", 1.0, "elastomer"), resin("mid", 50.0)


def sphere_distance(grid, centre, radius):
    """Signed distance of a sphere as a part holds it."""
    x, y, z = (c - m for c, m in zip(np.ix_(*grid.centres()), centre, strict=True))
    d = (np.sqrt(x**2 + y**2 + z**2) - radius) * 16 / min(grid.spacing)
    return np.clip(np.rint(d), -127, 127).astype(np.int8)


def layered_part(outline="distance", shape=(7, 6, 5), spacing=(0.31, 0.4, 0.27), pure=False):
    """Blends of three resins in layers along x (or two pure halves) inside a ball."""
    grid = VoxelGrid(shape=shape, spacing=spacing, origin=(1.0, -2.0, 0.5))
    blends = [
        Blend.pure("hard"),
        Blend.of({"hard": 3, "soft": 1}),
        Blend.of({"hard": 1, "soft": 1, "mid": 1}),
        Blend.of({"mid": 0.9, "soft": 0.1}),
        Blend.pure("soft"),
    ]
    if pure:
        blends = [Blend.pure("hard"), Blend.pure("soft")]
    order = np.arange(shape[0]) * len(blends) // shape[0] + 1
    labels = np.broadcast_to(order[:, None, None], shape).astype(np.uint16)
    resins = (HARD, SOFT) if pure else (HARD, SOFT, MID)
    options = {}
    if outline != "voxels":
        size = np.array(shape) * spacing
        distance = sphere_distance(grid, np.array(grid.origin) + size / 2, 0.45 * size.min())
        occupancy = np.clip(127.5 - 8 * distance.astype(float), 0, 255).astype(np.uint8)
        labels = np.where(occupancy > 0, labels, 0).astype(np.uint16)
        options = {"occupancy": occupancy}
        if outline == "distance":
            options["distance"] = distance
    return Part(grid=grid, resins=resins, palette=(EMPTY, *blends), labels=labels, **options)


def _lerp(array, index, axis, rounded=False):
    """Linear interpolation along one axis in float32, at site positions in voxels."""
    n = array.shape[axis]
    index = np.clip(index, 0, n - 1)
    low = np.minimum(index.astype(int), max(n - 2, 0))
    w = (index - low).astype(np.float32)
    if rounded:
        w = (w >= 0.5).astype(np.float32)
    a = np.take(array, low, axis)
    b = np.take(array, np.minimum(low + 1, n - 1), axis)
    w = w.reshape([-1 if d == axis else 1 for d in range(array.ndim)])
    return a + w * (b - a)


def nearest_printed(labels, keep):
    """Each voxel's label, or that of the nearest kept one among its 26 neighbours."""
    offsets = sorted(np.ndindex(3, 3, 3), key=lambda o: (sum(abs(v - 1) for v in o), o))
    padded = np.pad(np.where(keep[labels], labels, 0), 1)
    out = np.zeros_like(labels)
    for a, b, c in offsets:
        moved = padded[a:, b:, c:][: labels.shape[0], : labels.shape[1], : labels.shape[2]]
        out = np.where(out == 0, moved, out)
    return out


def _cells(values, low, axes=(0, 1, 2)):
    """The eight corners of the cell of every site."""
    for corner in np.ndindex(2, 2, 2):
        picks = [
            np.minimum(lo + c, n - 1) for lo, c, n in zip(low, corner, values.shape, strict=True)
        ]
        yield values[np.ix_(*picks)]


def slice_layer_numpy(part, raster, resins, layer, *, support, seed):
    """One printer layer by whole-array NumPy, packed bits ``[channel, row, byte]``."""
    names = [m.name for m in part.resins]
    table = part.palette_fractions()[:, [names.index(r) for r in resins]]
    total = np.cumsum(table, axis=1)[:, :-1]
    total[total > 1 - 1e-6] = 1.0
    total = total.astype(np.float32)
    outline = raster.to_image(outline_field(part))
    fields = [outline, column_support(outline)]
    labels = nearest_printed(raster.to_image(part.labels), part.printed_labels())
    index = [raster.image_index(part.grid, m) for m in range(3)]
    index[0] = index[0][layer : layer + 1]
    inside = [(i >= -0.5) & (i <= n - 0.5) for i, n in zip(index, outline.shape, strict=True)]
    stepped = part.distance is None and part.occupancy is None

    def at_sites(array):
        for axis in range(3):
            array = _lerp(array, index[axis], axis, stepped)
        return array[0]

    on_grid = np.ix_(inside[1], inside[2])
    level = []
    for f in fields:
        value = np.full(raster.image_shape[1:], 1.0, np.float32)
        if inside[0][0]:
            value[on_grid] = at_sites(f.astype(np.float32))[on_grid]
        level.append(value)
    clipped = [np.clip(i, 0, n - 1) for i, n in zip(index, labels.shape, strict=True)]
    low = [
        np.minimum(c.astype(int), max(n - 2, 0)) for c, n in zip(clipped, labels.shape, strict=True)
    ]
    corner = np.stack([c[0] for c in _cells(labels, low)])
    same = (corner == corner[0]).all(axis=0)
    pure = (table.max(axis=1) == 1.0)[corner].any(axis=0)
    f32 = table.astype(np.float32)[corner]
    known = (corner > 0)[..., None]
    spread = np.where(known, f32, -1).max(axis=0) - np.where(known, f32, 2).min(axis=0)
    hard = ~same & (pure | (spread >= np.float32(0.5)).any(axis=-1))
    near_at = [
        np.minimum(lo + ((c - lo).astype(np.float32) >= 0.5), n - 1)
        for lo, c, n in zip(low, clipped, labels.shape, strict=True)
    ]
    near = labels[np.ix_(*near_at)][0]
    phase = mask_module.mask_phase(seed)
    l0, r0, c0 = np.add(phase, raster.image_offset)
    rows = r0 + np.arange(raster.image_shape[1])[:, None]
    columns = c0 + np.arange(raster.image_shape[2])[None, :]
    sx, sy = mask_module.SKEW
    n = mask_module.SIDE
    z = (l0 + layer + sx * (columns // n) + sy * (rows // n)) % n
    threshold = mask_module.thresholds()[z, rows % n, columns % n]
    site = np.ones(raster.image_shape[1:], np.uint8)
    for m in range(total.shape[1]):
        smooth = total[:, m][labels]
        for axis in range(3):
            smooth = _lerp(smooth, index[axis], axis)
        site += threshold >= np.where(hard, total[near, m], smooth[0])
    site = np.where(level[0] < 0, site, np.where(level[1] < 0, len(resins) + 1, 0))
    planes = [site == m + 1 for m in range(len(resins) + int(support))]
    return np.packbits(np.stack(planes), axis=2)


def pack_words(plane):
    """One bool plane as words of 64 sites, the first highest."""
    packed = np.packbits(plane, axis=1)
    padded = np.pad(packed, ((0, 0), (0, -packed.shape[1] % 8)))
    return padded.view(">u8").astype(np.uint64)

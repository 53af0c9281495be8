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


def weights(index, n):
    """Lower and upper voxel of each site along one axis, and the weight of the upper one."""
    index = np.clip(index, 0, n - 1)
    low = np.minimum(index.astype(int), max(n - 2, 0))
    return low, np.minimum(low + 1, n - 1), (index - low).astype(np.float32)


def nearest_printed(labels, keep):
    """Each voxel's label, or that of the nearest kept one among its 26 neighbours."""
    offsets = sorted(np.ndindex(3, 3, 3), key=lambda o: (sum(abs(v - 1) for v in o), o))
    padded = np.pad(np.where(keep[labels], labels, 0), 1)
    out = np.zeros_like(labels)
    for a, b, c in offsets:
        moved = padded[a:, b:, c:][: labels.shape[0], : labels.shape[1], : labels.shape[2]]
        out = np.where(out == 0, moved, out)
    return out


class NumpySlicer:
    """The slicer in whole-array NumPy: separable interpolation, planes first."""

    def __init__(self, part, raster, resins, *, support, seed):
        names = [m.name for m in part.resins]
        order = sorted(resins, key=lambda r: -part.resin(r).E.value)  # the stiffest first
        self.numbers = [resins.index(r) + 1 for r in order]
        self.table = part.palette_fractions()[:, [names.index(r) for r in order]]
        total = np.cumsum(self.table, axis=1)[:, :-1]
        total[total > 1 - 1e-6] = 1.0
        self.total = total.astype(np.float32)
        self.pure = self.table.max(axis=1) == 1.0
        self.f32 = self.table.astype(np.float32)
        outline = raster.to_image(outline_field(part))
        self.fields = [outline, column_support(outline)] if support else [outline]
        self.labels = nearest_printed(raster.to_image(part.labels), part.printed_labels())
        self.stepped = part.distance is None and part.occupancy is None
        self.raster = raster
        self.support = support
        self.index = [raster.image_index(part.grid, m) for m in range(3)]
        shape = outline.shape
        self.on_grid = [
            (i >= -0.5) & (i <= n - 0.5) for i, n in zip(self.index, shape, strict=True)
        ]
        self.axes = [weights(i, n) for i, n in zip(self.index, shape, strict=True)]
        start = np.add(mask_module.mask_phase(seed), raster.image_offset)
        self.start = start[0]
        self.rows = start[1] + np.arange(raster.image_shape[1])[:, None]
        self.columns = start[2] + np.arange(raster.image_shape[2])[None, :]
        self.mask = mask_module.thresholds()

    def along_plane(self, plane, stepped):
        """Rows, then columns."""
        for axis in (1, 2):
            low, high, w = self.axes[axis]
            w = (w >= 0.5).astype(np.float32) if stepped else w
            w = w[:, None] if axis == 1 else w[None, :]
            a = np.take(plane, low, axis - 1)
            plane = a + w * (np.take(plane, high, axis - 1) - a)
        return plane

    def threshold(self, layer):
        n = mask_module.SIDE
        sx, sy = mask_module.SKEW
        z = (self.start + layer + sx * (self.columns // n) + sy * (self.rows // n)) % n
        return self.mask[z, self.rows % n, self.columns % n]

    def hard_cells(self, lower, upper):
        """Cells of eight voxels that hold an interface."""
        pad = [np.pad(p, [(0, int(n == 1)) for n in p.shape], mode="edge") for p in (lower, upper)]
        corner = np.stack(
            [p[a : p.shape[0] - 1 + a, b : p.shape[1] - 1 + b] for p in pad
             for a in (0, 1) for b in (0, 1)]
        )  # fmt: skip
        same = (corner == corner[0]).all(axis=0)
        known = (corner > 0)[..., None]
        f = self.f32[corner]
        spread = np.where(known, f, -1).max(axis=0) - np.where(known, f, 2).min(axis=0)
        return ~same & (self.pure[corner].any(axis=0) | (spread >= np.float32(0.5)).any(axis=-1))

    def cumulative(self, layer):
        """Summed fractions at every pixel of one layer, all resins but the last."""
        low, high, w = (v[layer] for v in self.axes[0])
        hard = self.hard_cells(self.labels[low], self.labels[high])
        hard = hard[np.ix_(self.axes[1][0], self.axes[2][0])]
        nearest = [np.where(v[2] >= 0.5, v[1], v[0]) for v in self.axes[1:]]
        near = self.labels[high if w >= 0.5 else low][np.ix_(*nearest)]
        for m in range(self.table.shape[1] - 1):
            a, b = self.total[self.labels[low], m], self.total[self.labels[high], m]
            yield np.where(hard, self.total[near, m], self.along_plane(a + w * (b - a), False))

    def inside(self, layer):
        """Pixels of one layer inside the part, and inside part or support."""
        low, high, w = (v[layer] for v in self.axes[0])
        wo = np.float32(w >= 0.5) if self.stepped else w
        out = []
        for field in self.fields:
            a, b = field[low].astype(np.float32), field[high].astype(np.float32)
            level = self.along_plane(a + wo * (b - a), self.stepped)
            out.append((level < 0) & self.on_grid[1][:, None] & self.on_grid[2])
        return out

    def chosen(self, layer, inside):
        """The resin of every pixel of one layer, as its material number."""
        threshold = self.threshold(layer)
        site = np.full(threshold.shape, self.numbers[0], np.uint8)
        for m, value in enumerate(self.cumulative(layer)):
            site[threshold >= value] = self.numbers[m + 1]
        return site

    def sites(self, layer):
        """Material number of every pixel of one layer."""
        if not self.on_grid[0][layer]:
            return np.zeros(self.raster.image_shape[1:], np.uint8)
        inside = self.inside(layer)
        out = np.where(inside[0], self.chosen(layer, inside[0]), 0)
        if self.support:
            out = np.where(inside[1] & ~inside[0], self.table.shape[1] + 1, out)
        return out.astype(np.uint8)

    def bits(self, layer):
        """Packed bits of one layer."""
        site = self.sites(layer)
        n = self.table.shape[1] + int(self.support)
        return np.packbits(np.stack([site == m + 1 for m in range(n)]), axis=2)


def pack_words(plane):
    """One bool plane as words of 64 sites, the first highest."""
    packed = np.packbits(plane, axis=1)
    padded = np.pad(packed, ((0, 0), (0, -packed.shape[1] % 8)))
    return padded.view(">u8").astype(np.uint64)

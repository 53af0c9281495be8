"""Large invented designs made block by block, for the scale tests and benchmarks."""

import numpy as np
from print_twins import HARD, MID, SOFT, resin

from voxelmat.io.bigpart_write import fill_big_part
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part

PERIOD = 24  # voxels a cell of the sheet
STEPS = 64  # blends along x
RESINS = (HARD, SOFT, MID, *(resin(f"r{n}", 10.0 * n) for n in range(4, 8)))


def sheet_cell():
    """Signed distance of one cell of a sheet |g| < 0.6 with g = sin x cos y + sin y cos z + ...

    Distance to first order, (|g| - 0.6) / |grad g|: a formula for an invented lattice.
    """
    w = 2 * np.pi / PERIOD
    x, y, z = np.meshgrid(*[w * (np.arange(PERIOD) + 0.5)] * 3, indexing="ij")
    sin, cos = np.sin, np.cos
    g = sin(x) * cos(y) + sin(y) * cos(z) + sin(z) * cos(x)
    slope = np.stack(
        [
            cos(x) * cos(y) - sin(z) * sin(x),
            cos(y) * cos(z) - sin(x) * sin(y),
            cos(z) * cos(x) - sin(y) * sin(z),
        ]
    )
    length = w * np.maximum(np.linalg.norm(slope, axis=0), 0.2)
    return np.clip(np.rint(16 * (np.abs(g) - 0.6) / length), -127, 127).astype(np.int8)


def graded_palette(n_resins):
    """Blends that go from the first resin over the others to the last, 64 steps, all mixed."""
    place = np.linspace(0, n_resins - 1, STEPS)
    names = [m.name for m in RESINS[:n_resins]]
    share = np.maximum(0.02, 1 - np.abs(place[:, None] - np.arange(n_resins)))
    return (EMPTY, *(Blend.of(dict(zip(names, row, strict=True))) for row in share))


class Sheet:
    """A sheet lattice over a whole grid, graded along x; its arrays exist block by block."""

    def __init__(self, shape, spacing=0.3, n_resins=3, origin=(0.0, 0.0, 0.0)):
        self.grid = VoxelGrid(shape=shape, spacing=(spacing,) * 3, origin=origin)
        self.resins = RESINS[:n_resins]
        self.palette = graded_palette(n_resins)
        self.name = "sheet"
        self.occupancy = None
        self._cell = sheet_cell()
        self._step = 1 + np.arange(shape[0]) * STEPS // shape[0]

    def block(self, index):
        """Labels and distance of a block given by three slices."""
        ranges = [np.arange(n)[s] for n, s in zip(self.grid.shape, index, strict=True)]
        distance = self._cell[np.ix_(*[r % PERIOD for r in ranges])]
        label = self._step[ranges[0]].astype(np.uint16)[:, None, None]
        return np.where(distance < 24, label, np.uint16(0)), distance

    def make(self, first, last):
        """A slab for `fill_big_part`."""
        labels, distance = self.block((slice(None), slice(None), slice(first, last)))
        return {"labels": labels, "distance": distance}

    def store(self, folder, **options):
        """Fill a part store."""
        return fill_big_part(
            folder,
            self.make,
            grid=self.grid,
            resins=self.resins,
            palette=self.palette,
            source="sheet",
            name=self.name,
            **options,
        )

    def part(self):
        """All of it in memory."""
        return Part(
            grid=self.grid,
            resins=self.resins,
            palette=self.palette,
            name=self.name,
            **self.make(0, self.grid.shape[2]),
        )

    # ------------------------------------------------------------------ read like a stored part
    class _Array:
        def __init__(self, sheet, number):
            self.sheet, self.number = sheet, number

        def __getitem__(self, index):
            return self.sheet.block(index)[self.number]

    @property
    def labels(self):
        return self._Array(self, 0)

    @property
    def distance(self):
        return self._Array(self, 1)

    @property
    def _head(self):
        grid = VoxelGrid(shape=(1, 1, 1), spacing=self.grid.spacing)
        labels = np.zeros((1, 1, 1), np.uint16)
        return Part(grid=grid, resins=self.resins, palette=self.palette, labels=labels)

    def palette_fractions(self):
        return self._head.palette_fractions()

    def printed_labels(self):
        return self._head.printed_labels()

    def resin(self, name):
        return self._head.resin(name)

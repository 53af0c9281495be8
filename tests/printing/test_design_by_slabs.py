"""Boxes, resins and volumes of a design counted by slabs equal those of the whole arrays."""

import numpy as np
import pytest
from print_twins import HARD, SOFT, layered_part, resin, sphere_distance
from scipy import ndimage

from voxelmat.io.bigpart_write import save_big_part
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part
from voxelmat.printing import designed, support
from voxelmat.printing.designed import designed_volumes, used_resins
from voxelmat.printing.support import outline_box, outline_field


def volumes_whole(part):
    """The rule of `designed_volumes` on whole arrays."""
    printed = part.printed_labels()
    fill = np.full(part.grid.shape, 255.0)
    if part.occupancy is not None:
        fill = part.occupancy.astype(float)
    if part.distance is not None:
        cut = np.clip(127.5 - 255 / 16 * part.distance.astype(np.float32), 0, 255)
        bought = ~printed[part.labels] & (part.labels > 0)
        near = ndimage.binary_dilation(bought, iterations=2) if bought.any() else bought
        fill = cut if part.occupancy is None else np.where(near, np.minimum(fill, cut), fill)
    fill = np.where(part.labels > 0, np.rint(fill), 0)
    table = part.palette_fractions() * printed[:, None]
    amount = np.einsum("xyz,xyzr->r", fill, table[part.labels]) / 255 * part.grid.voxel_volume
    return {m.name: v for m, v in zip(part.resins, amount, strict=True)}


def with_insert():
    """A ball round a bought-in core, with a clearance cut from the distance (invented)."""
    grid = VoxelGrid(shape=(9, 8, 11), spacing=(0.3, 0.3, 0.3))
    outer = sphere_distance(grid, (1.3, 1.2, 1.6), 1.25)
    core = sphere_distance(grid, (1.3, 1.2, 1.6), 0.5)
    labels = np.where(core < 0, 3, np.where(outer < 12, 1, 0))
    labels[5:, :, :] = np.where(labels[5:, :, :] == 1, 2, labels[5:, :, :])
    occupancy = np.where(labels > 0, np.clip(127.5 - 8.0 * outer, 0, 255), 0).astype(np.uint8)
    bolt = resin("bolt", 200000.0, "bought-in")
    return Part(
        grid=grid,
        resins=(HARD, SOFT, bolt),
        palette=(EMPTY, Blend.pure("hard"), Blend.of({"hard": 1, "soft": 1}), Blend.pure("bolt")),
        labels=labels,
        distance=np.maximum(outer, -core - 3),
        occupancy=occupancy,
    )


PARTS = {
    "insert": with_insert(),
    "no occupancy": with_insert().replace(occupancy=None),
    "distance": layered_part("distance"),
    "occupancy": layered_part("occupancy"),
    "voxels": layered_part("voxels"),
    "flat": layered_part("voxels", shape=(4, 5, 1)),
}


@pytest.fixture(params=[1, 3, 100])
def slabs(request, monkeypatch):
    """Slabs of so many planes along z."""

    def z_slabs(part):
        n = part.grid.shape[2]
        return [(a, min(a + request.param, n)) for a in range(0, n, request.param)]

    monkeypatch.setattr(designed, "z_slabs", z_slabs)
    monkeypatch.setattr(support, "z_slabs", z_slabs)


@pytest.mark.parametrize("name", PARTS)
def test_slabs_do_not_matter(slabs, name, tmp_path):
    part = PARTS[name]
    stored = save_big_part(part, tmp_path / "s", kind="maps")
    wanted = volumes_whole(part)
    box = outline_box(part, outline_field(part))
    for either in (part, stored):
        assert designed_volumes(either) == pytest.approx(wanted, rel=1e-12)
        assert used_resins(either) == tuple(n for n, v in wanted.items() if v > 0)
        assert outline_box(either) == box
    assert designed_volumes(part) == designed_volumes(stored)

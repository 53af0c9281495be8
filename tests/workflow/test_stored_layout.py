"""A layout rule that takes its material from a part that was kept."""

import numpy as np
import pytest

from voxelmat.errors import FileFormatError, InputError
from voxelmat.io.store import save_part
from voxelmat.model.blend import Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.workflow.build import build
from voxelmat.workflow.painting import laid_from, painted

RULE = """
[[layout]]
region = "pad"
kind = "stored"
file = "kept.npz"
resins = ["measured-soft", "measured-hard"]
"""


def _kept(part):
    """Half of the part in another blend, and a hole in it."""
    voxels = part.labels > 0
    voxels[:6] = False
    blend = Blend.of({"measured-soft": 0.5, "measured-hard": 0.5})
    new = painted(part, voxels, np.zeros(int(voxels.sum()), dtype=np.intp), [blend])
    labels, fill, outline = new.labels.copy(), new.occupancy.copy(), new.distance.copy()
    hole = (slice(3, 6), slice(3, 6), slice(None))
    labels[hole], fill[hole], outline[hole] = 0, 0, 16
    return new.replace(labels=labels, occupancy=fill, distance=outline)


def test_the_same_grid_gives_the_same_voxels(design):
    part = build(design).part
    kept = _kept(part)
    save_part(kept, design.parent / "kept.npz")
    design.write_text(design.read_text() + RULE)
    again = build(design).part
    pad = part.bodies["pad"]
    blends = np.array([str(b) for b in again.palette])[again.labels]
    wanted = np.array([str(b) for b in kept.palette])[kept.labels]
    assert (blends[pad] == wanted[pad]).all()
    assert (again.labels[~pad] > 0).sum() == (part.labels[~pad] > 0).sum()
    np.testing.assert_array_equal(again.occupancy[pad], kept.occupancy[pad])
    np.testing.assert_array_equal(again.distance[~pad], part.distance[~pad])
    assert (again.distance[pad] >= part.distance[pad]).all()
    assert not (again.bodies["pad"] & (again.labels == 0)).any()


def test_another_grid_takes_the_nearest_voxel_and_the_same_volume(design):
    part = build(design).part
    kept = _kept(part)
    fine = VoxelGrid(
        shape=tuple(2 * n for n in part.grid.shape),
        spacing=tuple(0.5 * h for h in part.grid.spacing),
        origin=part.grid.origin,
    )
    double = part.replace(
        grid=fine,
        labels=part.labels.repeat(2, 0).repeat(2, 1).repeat(2, 2),
        occupancy=part.occupancy.repeat(2, 0).repeat(2, 1).repeat(2, 2),
        distance=None,
        bodies={},
    )
    laid = laid_from(double, double.labels > 0, kept)
    assert sum(laid.volumes().values()) == pytest.approx(sum(kept.volumes().values()), rel=0.06)
    inner = laid.labels[20:24, 12:14, 6:8]
    assert {str(laid.palette[i]) for i in np.unique(inner)} == {
        str(Blend.of({"measured-soft": 0.5, "measured-hard": 0.5}))
    }
    assert (laid.occupancy[(laid.labels > 0)] > 0).all()


def test_a_missing_or_foreign_file_is_named(design):
    design.write_text(design.read_text() + RULE)
    with pytest.raises(InputError, match=r"kept\.npz"):
        build(design)
    (design.parent / "kept.npz").write_bytes(b"no part")
    with pytest.raises(FileFormatError, match="not a whole part"):
        build(design)

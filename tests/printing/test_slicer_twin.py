"""The fused slicing kernel against a plain NumPy twin, bit for bit."""

import itertools

import numpy as np
import pytest
from print_twins import NumpySlicer, layered_part

from voxelmat.printing.designed import used_resins
from voxelmat.printing.halftone import Slicer
from voxelmat.printing.place import place
from voxelmat.printing.profile import load_profile
from voxelmat.printing.support import outline_box, outline_field


def _raster(part, profile, turns=()):
    return place(outline_box(part, outline_field(part)), profile, turns)


@pytest.mark.parametrize("outline", ["distance", "occupancy", "voxels"])
@pytest.mark.parametrize(
    ("profile", "turns"),
    [
        ("invented-standard", ()),
        ("invented-coarse", ["x 90", "z -90"]),
        ("invented-fine", ["y 180"]),
    ],
)
def test_bits_equal_the_numpy_twin(outline, profile, turns):
    part = layered_part(outline, shape=(7, 6, 5))
    raster = _raster(
        part, load_profile(profile).replace(layer=load_profile(profile).layer * 3), turns
    )
    resins = used_resins(part)
    slicer = Slicer(part, raster, resins, support=True, seed=5)
    twin = NumpySlicer(part, raster, resins, support=True, seed=5)
    n = raster.image_shape[0]
    wanted = [0, 1, n // 3, n // 2, n - 1]
    for layer, bits in enumerate(slicer.layers(0, n)):
        if layer in wanted:
            assert np.array_equal(bits, twin.bits(layer))


def test_any_split_gives_the_same_bits():
    part = layered_part("distance", shape=(7, 6, 5))
    raster = _raster(part, load_profile("invented-standard"))
    slicer = Slicer(part, raster, used_resins(part), support=True, seed=0)
    n = raster.image_shape[0]
    whole = list(slicer.layers(0, n))
    parts = [b for a, e in slicer.slabs(-(-n // 7)) for b in slicer.layers(a, e)]
    assert all(np.array_equal(a, b) for a, b in itertools.zip_longest(whole, parts))


def test_a_pure_zone_is_never_dithered():
    part = layered_part("voxels", shape=(6, 4, 4), pure=True)
    raster = _raster(part, load_profile("invented-standard"))
    slicer = Slicer(part, raster, used_resins(part), support=False, seed=0)
    k = raster.image_index(part.grid, 0).round().astype(int)
    j = raster.image_index(part.grid, 1)
    i = raster.image_index(part.grid, 2)
    j, i = (np.clip(np.floor(v + 0.5), 0, n - 1).astype(int) for v, n in ((j, 4), (i, 6)))
    for layer, bits in enumerate(slicer.layers(0, raster.image_shape[0])):
        near = part.labels[:, :, min(k[layer], 3)].T[np.ix_(j, i)]
        got = np.unpackbits(bits, axis=2)[:, :, : raster.image_shape[2]]
        for channel, label in enumerate((1, 2)):
            assert np.array_equal(got[channel][:-1, :-1], (near == label)[:-1, :-1])

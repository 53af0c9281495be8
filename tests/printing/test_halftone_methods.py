"""Every halftone against its slow twin, bit for bit, and the same bits for any split of layers."""

import itertools
from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pytest
from halftone_twins import DiffusionSlicer, HashSlicer
from print_twins import HARD, NumpySlicer, layered_part, resin

from voxelmat.errors import InputError
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.halftone import METHODS, Halftone
from voxelmat.model.part import Part
from voxelmat.printing.designed import used_resins
from voxelmat.printing.halftone import Slicer
from voxelmat.printing.place import place
from voxelmat.printing.profile import load_profile
from voxelmat.printing.support import outline_box

TWINS = {"blue noise": NumpySlicer, "error diffusion": DiffusionSlicer, "hash noise": HashSlicer}
COARSE = load_profile("invented-coarse")


def sliced(part, method, turns=(), layer=3, **more):
    """A slicer of a small part on few, coarse layers, and its arguments."""
    raster = place(outline_box(part), COARSE.replace(layer=COARSE.layer * layer), turns)
    options = {"support": True, "seed": 5, **more}
    slicer = Slicer(part, raster, used_resins(part), halftone=Halftone(method=method), **options)
    return slicer, (part, raster, used_resins(part)), options


@pytest.mark.parametrize("turns", [(), ["x 90", "z -90"]])
@pytest.mark.parametrize("outline", ["distance", "voxels"])
@pytest.mark.parametrize("method", METHODS)
def test_bits_equal_the_slow_twin(method, outline, turns):
    slicer, given, options = sliced(layered_part(outline, shape=(7, 5, 4)), method, turns)
    twin = TWINS[method](*given, **options)
    counts = np.zeros(5, int)
    for layer, bits in enumerate(slicer.layers(0, slicer.image_shape[0])):
        assert np.array_equal(bits, twin.bits(layer)), layer
        counts[: len(bits)] += np.unpackbits(bits, axis=2).sum(axis=(1, 2), dtype=int)
    assert (counts[:3] > 0).all()
    assert (counts[3] > 0) == (outline == "distance")


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("slabs", [1, 2, 7])
def test_any_split_and_threads_give_the_same_bits(method, slabs):
    slicer, _, _ = sliced(layered_part("distance", shape=(7, 6, 5)), method, layer=1)
    n = slicer.image_shape[0]
    whole = list(slicer.layers(0, n))
    runs = slicer.slabs(-(-n // slabs))
    assert len(runs) == slabs
    with ThreadPoolExecutor(2) as pool:
        parts = list(pool.map(lambda run: list(slicer.layers(*run)), runs[::-1]))[::-1]
    pairs = itertools.zip_longest(whole, itertools.chain(*parts))
    assert all(np.array_equal(a, b) for a, b in pairs)


@pytest.mark.parametrize("method", METHODS)
def test_a_seed_changes_the_droplets_but_not_the_outline(method):
    part = layered_part("distance", shape=(7, 6, 5))
    a, b = (sliced(part, method, seed=seed)[0] for seed in (1, 2))
    same, n = 0, a.image_shape[0]
    for one, other in zip(a.layers(0, n), b.layers(0, n), strict=True):
        same += np.array_equal(one, other)
        assert np.array_equal(np.bitwise_or.reduce(one[:3]), np.bitwise_or.reduce(other[:3]))
    assert same < n


def test_only_error_diffusion_is_serial():
    part = layered_part("voxels", shape=(3, 3, 3))
    assert [sliced(part, m)[0].serial for m in METHODS] == [False, True, False]


@pytest.mark.parametrize("method", ["blue noise", "error diffusion"])
def test_two_hundred_and_fifty_four_resins(method):
    # Each voxel of a row is a blend of its own resin and the first one, so all numbers occur.
    n = 254
    names = [f"resin{m:03d}" for m in range(n)]
    grid = VoxelGrid(shape=(n - 1, 1, 1), spacing=(0.3, 0.6, 0.3))
    part = Part(
        grid=grid,
        resins=tuple(resin(name) for name in names),
        palette=(EMPTY, *(Blend.of({names[0]: 1, name: 2}) for name in names[1:])),
        labels=np.arange(1, n, dtype=np.uint16).reshape(n - 1, 1, 1),
    )
    slicer, _, _ = sliced(part, method, support=False, layer=1)
    assert slicer.n_channels == n
    seen = np.zeros(256, np.int64)
    for sites, bits in zip(slicer.sites(0, 6), slicer.layers(0, 6), strict=True):
        count = np.bincount(sites.ravel(), minlength=256)
        assert np.array_equal(count[1:255], np.unpackbits(bits, axis=2).sum(axis=(1, 2), dtype=int))
        seen += count
    assert (seen[1:255] > 0).all()
    assert seen[255] == 0
    assert seen[1] / seen[1:].sum() == pytest.approx(1 / 3, abs=0.02)


def test_too_many_resins():
    part = Part.uniform(VoxelGrid(shape=(2, 2, 2), spacing=(1.0, 1.0, 1.0)), HARD)
    raster = place(outline_box(part), COARSE)
    with pytest.raises(InputError, match="At most 254 resins"):
        Slicer(part, raster, tuple(f"r{m}" for m in range(255)), support=False, seed=0)


def test_a_resin_that_the_part_has_none_of_is_not_laid():
    part = layered_part("distance", shape=(7, 6, 5))
    slicer, given, options = sliced(part, "blue noise")
    n = slicer.image_shape[0]
    more = Slicer(part, given[1], ("absent", *given[2]), **options)
    for one, other in zip(slicer.layers(0, n), more.layers(0, n), strict=True):
        assert not other[0].any()
        assert np.array_equal(one, other[1:])

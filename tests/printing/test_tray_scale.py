"""Rasters of 1e12 sites: global coordinates stay exact, memory stays flat, stores are streamed."""

import tracemalloc
from fractions import Fraction

import numpy as np
import pytest
from big_designs import Sheet
from print_twins import NumpySlicer

from voxelmat.io.bigpart import KINDS
from voxelmat.io.bigpart_write import save_big_part
from voxelmat.model.halftone import Halftone
from voxelmat.printing import planes as planes_module
from voxelmat.printing.halftone import Slicer
from voxelmat.printing.mask import SIDE, SKEW, mask_phase
from voxelmat.printing.planes import DesignPlanes
from voxelmat.printing.raster import Raster
from voxelmat.printing.support import fill_columns

# L2 of the check values: a tray of 500 x 400 x 200 mm at 600 x 600 dpi and 15 um has 1.49e12
# sites (invented tray; that a tray holds on the order of 1e12 is common practice, no source).
PITCH = (Fraction(254, 6000), Fraction(254, 6000), Fraction(15, 1000))
TRAY = tuple(int(s / p) for s, p in zip((500, 400, 200), PITCH, strict=True))
RESINS = ("hard", "soft", "mid")


def window(size, offset, corner="front left"):
    return Raster(
        pitch=PITCH,
        shape=(*size, TRAY[2]),
        offset=(*offset, 0),
        rotation=((1, 0, 0), (0, 1, 0), (0, 0, 1)),
        translation=(0.0, 0.0, 0.0),
        tray_sites=TRAY[:2],
        origin_corner=corner,
        row_direction="x",
    )


def far_window(size):
    return window(size, (TRAY[0] - size[0], TRAY[1] - size[1]))


def test_the_tray_has_1_49e12_sites():
    assert np.prod([float(n) for n in TRAY]) == pytest.approx(1.49e12, rel=2e-3)
    assert TRAY[0] * TRAY[1] * TRAY[2] > 2**40


@pytest.mark.parametrize("method", ["blue noise", "hash noise"])
def test_two_windows_in_the_far_corner_give_the_same_bits(method):
    """The design is as large as the tray; its last ten layers are sliced, seen twice."""
    sheet = Sheet(tuple(int(s / 0.3) for s in (500, 400, 200)))
    options = {"support": False, "seed": 5, "halftone": Halftone(method=method)}
    large, small = (211, 150), (75, 61)
    layers = (int(199.8 / 0.015) - 10, int(199.8 / 0.015))
    one = Slicer(sheet, far_window(large), RESINS, **options).layers(*layers)
    two = Slicer(sheet, far_window(small), RESINS, **options).layers(*layers)
    seen = 0
    for a, b in zip(one, two, strict=True):
        crop = np.unpackbits(a, axis=2)[:, -small[1] :, large[0] - small[0] : large[0]]
        ours = np.unpackbits(b, axis=2)[:, :, : small[0]]
        assert np.array_equal(crop, ours)
        seen += int(ours.sum())
    assert seen > 10_000


def test_the_far_corner_equals_the_numpy_twin():
    sheet = Sheet((24, 20, 20), origin=(494.0, 394.0, 194.0))
    part, raster = sheet.part(), far_window((140, 130))
    slicer = Slicer(part, raster, RESINS, support=True, seed=5)
    twin = NumpySlicer(part, raster, RESINS, support=True, seed=5)
    last = TRAY[2] - 1
    top = min(last, int(part.grid.upper[2] / 0.015) - 1)
    for layer, bits in zip(range(top - 2, top + 1), slicer.layers(top - 2, top + 1), strict=True):
        assert bits.any()
        assert np.array_equal(bits, twin.bits(layer))


def test_the_mask_repeats_by_global_coordinates():
    """One tile further in x the mask comes back, its z phase moved by the skew."""
    sheet = Sheet((40, 12, 60), origin=(488.0, 396.0, 182.0))
    flat = sheet.part()
    # One blend everywhere, inside everywhere: what is left is the mask alone.
    flat = flat.replace(
        labels=np.full(flat.grid.shape, 20, np.uint16),
        distance=np.full(flat.grid.shape, -127, np.int8),
    )
    size = (3 * SIDE, 16)
    raster = far_window(size)
    slicer = Slicer(flat, raster, RESINS, support=False, seed=3)
    first = TRAY[2] - 200
    start = mask_phase(3)[2] + raster.image_offset[2]
    edge = -start % SIDE  # the first column of a tile
    bits = [np.unpackbits(b, axis=2) for b in slicer.layers(first, first + SIDE + 1)]
    tile, further = slice(edge, edge + SIDE), slice(edge + SIDE, edge + 2 * SIDE)
    assert np.array_equal(bits[SKEW[0]][:, :, tile], bits[0][:, :, further])
    assert not np.array_equal(bits[0][:, :, tile], bits[0][:, :, further])


def peak_bytes(call):
    tracemalloc.start()
    call()
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    return peak


@pytest.mark.parametrize("kind", ["array", *KINDS])
def test_memory_does_not_grow_with_the_layers(tmp_path, monkeypatch, kind):
    monkeypatch.setattr(planes_module, "BLOCK_BYTES", 1 << 18)
    sheet = Sheet((130, 110, 80))
    part = sheet.part() if kind == "array" else sheet.store(tmp_path / "s", kind=kind)
    raster = window((3000, 1200), (100, 100))
    slicer = Slicer(part, raster, RESINS, support=True, seed=0)

    def slice_layers(n):
        for _ in slicer.layers(300, 300 + n):
            pass

    slice_layers(1)  # compiled and opened
    few, many = (peak_bytes(lambda n=n: slice_layers(n)) for n in (40, 200))
    assert many < 1.05 * few


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("turns", [0, 1, 2, 3])
@pytest.mark.parametrize("block", [1, 4 * 60 * 5])
def test_stored_planes_equal_those_in_memory(tmp_path, monkeypatch, kind, turns, block):
    monkeypatch.setattr(planes_module, "BLOCK_BYTES", block)
    part = Sheet((9, 10, 11)).part()
    stored = save_big_part(part, tmp_path / "s", kind=kind)
    rotation = [
        ((1, 0, 0), (0, 1, 0), (0, 0, 1)),
        ((1, 0, 0), (0, -1, 0), (0, 0, -1)),
        ((0, 0, 1), (1, 0, 0), (0, 1, 0)),
        ((0, 0, -1), (0, 1, 0), (1, 0, 0)),
    ][turns]
    raster = Raster(
        pitch=PITCH, shape=(4, 4, 4), offset=(0, 0, 0), rotation=rotation,
        translation=(0.0, 0.0, 0.0), tray_sites=(9, 9),
    )  # fmt: skip
    one, two = (DesignPlanes(p, raster, support=fill_columns) for p in (part, stored))
    ours, theirs = one.cursor(), two.cursor()
    for k in [*range(one.shape[0]), *reversed(range(one.shape[0]))]:
        assert np.array_equal(ours.plane(k).labels, theirs.plane(k).labels)
        assert np.array_equal(ours.plane(k).outlines, theirs.plane(k).outlines)

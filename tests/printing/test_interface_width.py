"""Interfaces dithered over a width: the ramp, what it leaves alone, and a brute-force twin."""

import numpy as np
import pytest
from halftone_twins import RampSlicer, interface_place
from print_twins import HARD, MID, SOFT, layered_part, nearest_printed, sphere_distance

from voxelmat.errors import InputError
from voxelmat.io.bigpart_write import save_big_part
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.halftone import Halftone
from voxelmat.model.part import Part
from voxelmat.printing.designed import used_resins
from voxelmat.printing.halftone import Slicer
from voxelmat.printing.place import place
from voxelmat.printing.planes import DesignPlanes
from voxelmat.printing.preflight import preflight
from voxelmat.printing.profile import load_profile
from voxelmat.printing.ramp import InterfaceRamps
from voxelmat.printing.stack import write_stack
from voxelmat.printing.support import outline_box

PROFILE = load_profile("invented-standard")
RESINS = (HARD, SOFT, MID)
PALETTE = (EMPTY, Blend.pure("hard"), Blend.pure("soft"), Blend.pure("mid"))


def zoned(labels, spacing=(0.3, 0.3, 0.3), **more):
    """A part of pure zones."""
    labels = np.asarray(labels, np.uint16)
    grid = VoxelGrid(shape=labels.shape, spacing=spacing)
    return Part(grid=grid, resins=RESINS, palette=PALETTE, labels=labels, **more)


def halves(axis, shape=(10, 10, 10), **more):
    """Hard below the middle of an axis, soft above it."""
    at = np.arange(shape[axis]) * 2 // shape[axis] + 1
    labels = np.empty(shape, np.uint16)
    labels[:] = at.reshape([-1 if a == axis else 1 for a in range(3)])
    return zoned(labels, **more)


def sites(part, width=0.0, method="blue noise", seed=3):
    """Material numbers ``[layer, row, column]`` of the whole part, and its raster."""
    raster = place(outline_box(part), PROFILE)
    halftone = Halftone(method=method, interface_width_mm=width)
    slicer = Slicer(part, raster, used_resins(part), support=False, seed=seed, halftone=halftone)
    n = raster.image_shape
    return np.stack([s[:, : n[2]].copy() for s in slicer.sites(0, n[0])]), raster


@pytest.mark.parametrize(
    ("method", "width"),
    [
        ("blue noise", 0.12),
        ("blue noise", 0.3),
        ("blue noise", 0.75),
        ("hash noise", 0.3),
        ("error diffusion", 0.75),
    ],
)
@pytest.mark.parametrize("axis", [0, 1, 2])
def test_the_mean_fraction_follows_the_ramp(axis, method, width):
    part = halves(axis)
    got, raster = sites(part, width, method)
    hard, _ = sites(part, 0.0, method)
    assert np.array_equal(got > 0, hard > 0)
    image_axis = 2 - axis
    place_mm = (raster.image_index(part.grid, image_axis) + 0.5) * 0.3 - 1.5  # of the interface
    others = tuple(a for a in range(3) if a != image_axis)
    laid = (got > 0).sum(axis=others)
    share = (got == 1).sum(axis=others)[laid > 0] / laid[laid > 0]
    ramp = np.clip(0.5 - place_mm[laid > 0] / width, 0, 1)
    # Independent droplets have a standard deviation of sqrt(f (1 - f) / n) (K3, Bernoulli), and
    # those of a halftone are more even. Error diffusion loses what it passes up into a pure zone.
    allowed = 4 * np.sqrt(ramp * (1 - ramp) / laid.max())
    if method == "error diffusion":
        allowed = np.where(allowed > 0, 0.03, 0)
    assert (abs(share - ramp) <= allowed).all()
    # Rows of sites do not fall on the interface, so the hard halves may differ by one row.
    assert share.mean() == pytest.approx(0.5, abs=0.01)
    far = abs(place_mm) > width / 2
    assert far.sum() > 4
    pick = [slice(None)] * 3
    pick[image_axis] = far
    assert np.array_equal(got[tuple(pick)], hard[tuple(pick)])


@pytest.mark.parametrize("width", [0.15, 0.3, 0.45])
def test_a_ball_keeps_its_volume_and_the_outline_stays(width):
    # A linear ramp across a sphere of radius R holds 1 + (w / 2R)^2 of its volume: .9 % more for
    # the widest here. That the ramp rounds the steps of the voxels takes about half a per cent.
    grid = VoxelGrid(shape=(20, 20, 20), spacing=(0.3, 0.3, 0.3))
    inner = sphere_distance(grid, (3.0, 3.0, 3.0), 2.4)
    outer = sphere_distance(grid, (3.0, 3.0, 3.0), 2.9)
    labels = np.where(inner < 0, 1, 2) * (outer < 16)
    part = zoned(labels, distance=outer)
    hard, _ = sites(part)
    got, raster = sites(part, {("soft", "hard"): width})
    assert np.array_equal(got > 0, hard > 0)
    volumes = [np.bincount(s.ravel(), minlength=3)[1:3] for s in (hard, got)]
    assert volumes[1][0] == pytest.approx(volumes[0][0], rel=0.01)
    assert volumes[1][1] == pytest.approx(volumes[0][1], rel=0.01)
    z, y, x = ((raster.image_index(grid, m) + 0.5) * 0.3 - 3.0 for m in range(3))
    r = np.sqrt(z[:, None, None] ** 2 + y[:, None] ** 2 + x**2)
    # The voxels draw the ball in steps, up to .87 of a voxel off.
    far = abs(r - 2.4) > width / 2 + 0.26
    assert np.array_equal(got[far], hard[far])
    assert (got != hard)[~far].mean() > 0.03


def test_a_width_below_a_site_is_hard():
    part = halves(0, (6, 4, 4))
    assert np.array_equal(sites(part, 0.02)[0], sites(part)[0])
    assert not np.array_equal(sites(part, 0.2)[0], sites(part)[0])


def test_zones_across_a_gap_and_other_pairs_stay_sharp():
    labels = np.ones((12, 4, 6), np.uint16)
    labels[3] = 0
    labels[4:8] = 2
    labels[8:] = 3
    part = zoned(labels)
    hard, _ = sites(part)
    assert np.array_equal(sites(part, {("hard", "soft"): 0.9})[0], hard)  # a gap lies between
    got, raster = sites(part, {("mid", "soft"): 0.6})
    index = raster.image_index(part.grid, 2)
    near = abs(index - 7.5) < 1
    assert not np.array_equal(got[..., near], hard[..., near])
    assert np.array_equal(got[..., ~near], hard[..., ~near])


def test_graded_blends_are_left_alone():
    part = layered_part("distance", shape=(7, 6, 5))
    assert np.array_equal(sites(part, 0.5)[0], sites(part)[0])  # no two pure zones touch


@pytest.mark.parametrize("turns", [(), ["x 90", "z -90"]])
def test_distances_equal_brute_force(turns):
    random = np.random.default_rng(2)
    labels = np.where(random.random((5, 4, 6)) < 0.15, 0, 1)
    labels[2:] *= 2
    labels[3, 2:, 3:] = np.minimum(labels[3, 2:, 3:], 1)
    part = zoned(labels, spacing=(0.3, 0.25, 0.4))
    raster = place(outline_box(part), PROFILE, turns)
    halftone = Halftone(interface_width_mm={("hard", "soft"): 0.5})
    ramps = InterfaceRamps(part, raster, ("hard", "soft", "mid"), halftone)
    planes = DesignPlanes(part, raster)
    raw = raster.to_image(part.labels)
    extended = nearest_printed(raw, part.printed_labels())
    spacing = [part.grid.spacing[a] for a, _ in raster.part_axes()]
    keep = 0.25 + np.linalg.norm(spacing)
    wanted = interface_place(raw, extended, (1, 2), 0.5, spacing, keep)
    assert np.isfinite(wanted).sum() > 40
    for k, plane in enumerate(wanted):
        got = ramps.plane(planes, k, extended[k])
        known = np.isfinite(plane)
        assert np.array_equal(got.pair > 0, known)
        assert np.allclose(got.place[known], plane[known], rtol=1e-6)


@pytest.mark.parametrize("turns", [(), ["x 90", "z -90"]])
@pytest.mark.parametrize("width", [0.15, 0.6])
def test_bits_equal_the_slow_twin(width, turns):
    grid = VoxelGrid(shape=(6, 5, 6), spacing=(0.3, 0.3, 0.3))
    outer = sphere_distance(grid, (0.9, 0.75, 0.9), 0.8)
    labels = 1 + (np.indices(grid.shape).sum(axis=0) >= 8)
    part = zoned(labels * (outer < 16), distance=outer)
    raster = place(outline_box(part), PROFILE, turns)
    halftone = Halftone(interface_width_mm=width)
    options = {"support": True, "seed": 7}
    slicer = Slicer(part, raster, used_resins(part), halftone=halftone, **options)
    twin = RampSlicer(part, raster, used_resins(part), width, **options)
    for layer, bits in enumerate(slicer.layers(0, raster.image_shape[0])):
        assert np.array_equal(bits, twin.bits(layer)), layer


@pytest.mark.parametrize(
    ("width", "said"),
    [
        (-0.1, "0 or more"),
        (float("nan"), "finite"),
        ("wide", "one number"),
        ({"hard": 0.1}, "two resin names"),
        ({("hard", "hard"): 0.1}, "two resin names"),
        ({("hard", "soft"): 0.1, ("soft", "hard"): 0.2}, "has two widths"),
        ({("hard", "soft"): True}, "finite number"),
    ],
)
def test_widths_that_make_no_sense(width, said):
    with pytest.raises(InputError, match=said) as caught:
        Halftone(interface_width_mm=width)
    assert caught.value.key == "interface_width_mm"


@pytest.mark.parametrize(
    ("width", "said"), [({("hard", "gold"): 0.5}, "names resin 'gold'"), (100.0, "graded zone")]
)
def test_widths_that_do_not_go_with_the_part(width, said):
    with pytest.raises(InputError, match=said):
        sites(halves(0, (4, 4, 4)), width)


def test_plain_data_and_widths_by_pair():
    halftone = Halftone(interface_width_mm={("soft", "hard"): 0.2}, order=["soft", "hard"])
    assert halftone.as_dict() == {
        "method": "blue noise",
        "order": ["soft", "hard"],
        "interface_width_mm": {"hard | soft": 0.2},
    }
    assert Halftone.from_dict(halftone.as_dict()) == halftone
    assert Halftone.from_dict({}) == Halftone()
    assert Halftone.from_dict(Halftone(interface_width_mm=1).as_dict()).widest_mm == 1.0
    assert halftone.width_between("hard", "soft") == halftone.width_between("soft", "hard") == 0.2
    assert halftone.width_between("hard", "mid") == 0.0
    assert hash(halftone) == hash(Halftone(**{k: getattr(halftone, k) for k in halftone.as_dict()}))


@pytest.mark.parametrize("width", [0.3, 0.9, {("hard", "soft"): 0.6}])
def test_the_preflight_takes_no_ramp_for_a_fault_and_sees_what_is_none(tmp_path, width):
    part = halves(0, (20, 6, 4))
    halftone = Halftone(interface_width_mm=width)
    stack = write_stack(part, PROFILE, tmp_path / "s", halftone=halftone)
    known = {f.code for f in preflight(stack, part)}
    assert not known & {"wrong layer", "mirrored stack"}
    other = part.replace(labels=np.where(part.labels > 0, 3 - part.labels, 0).astype(np.uint16))
    assert "mirrored stack" in {f.code for f in preflight(stack, other)}  # the halves are swapped


@pytest.mark.parametrize("method", ["blue noise", "error diffusion"])
@pytest.mark.parametrize("slabs", [2, 7])
def test_any_split_gives_the_same_bits(method, slabs):
    part = halves(2, (5, 4, 8))
    raster = place(outline_box(part), PROFILE)
    halftone = Halftone(method=method, interface_width_mm=0.9)
    slicer = Slicer(part, raster, used_resins(part), support=False, seed=1, halftone=halftone)
    n = raster.image_shape[0]
    runs = slicer.slabs(-(-n // slabs))
    assert len(runs) == slabs
    parts = [bits for run in runs[::-1] for bits in list(slicer.layers(*run))[::-1]][::-1]
    assert all(np.array_equal(a, b) for a, b in zip(slicer.layers(0, n), parts, strict=True))


@pytest.mark.parametrize("kind", ["zarr", "maps"])
@pytest.mark.parametrize("axis", [0, 2])
def test_a_part_from_a_store_is_sliced_the_same(tmp_path, kind, axis):
    part = halves(axis, (8, 6, 8))
    stored = save_big_part(part, tmp_path / "p", kind=kind)
    assert np.array_equal(sites(part, 0.6)[0], sites(stored, 0.6)[0])

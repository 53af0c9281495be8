"""Jobs of several parts, a resin in several channels, and what a stack knows of its parts."""

import numpy as np
import pytest
from print_twins import HARD, layered_part, resin

from voxelmat.errors import InputError
from voxelmat.printing.average import average, stack_to_part
from voxelmat.printing.compose import on_whole_bytes, tray_window
from voxelmat.printing.job import PlacedPart, PrintJob, one_part_job, placed
from voxelmat.printing.preflight import preflight
from voxelmat.printing.profile import load_profile
from voxelmat.printing.readback import read_stack
from voxelmat.printing.source import Dealer
from voxelmat.printing.stack import write_job, write_stack

STANDARD = load_profile("invented-standard")
LOADED = STANDARD.replace(
    channels={"m1": "hard", "m2": "soft", "m3": "hard", "m4": "mid", "m5": "hard", "s": "support"},
    support_channel="s",
)


def part():
    return layered_part("distance", shape=(7, 6, 5))


# ---------------------------------------------------------------- a resin in several channels
def test_dealt_sites_are_all_there_once_and_depend_on_their_place_only():
    rng = np.random.default_rng(5)
    dealer = Dealer(one_part_job(part(), LOADED))  # hard, soft, mid, support
    materials = rng.integers(0, 5, (23, 40)).astype(np.uint8)
    z, y, x = one_part_job(part(), LOADED).window.image_offset
    planes = np.stack(list(dealer.planes(materials.copy(), 7)))
    pixels = np.unpackbits(planes, axis=2, count=40)
    assert (pixels.sum(axis=0) == (materials > 0)).all()
    of = {1: (0, 2, 4), 2: (1,), 3: (3,), 4: (5,)}
    # The slow twin: a site at a time, in blocks of 2 x 2 x 2 sites of the tray.
    for row, column in np.argwhere(materials):
        turn = (z + 7) // 2 + (y + row) // 2 + (x + column) // 2
        channels = of[int(materials[row, column])]
        assert pixels[channels[turn % len(channels)], row, column] == 1


def test_a_resin_in_three_channels(tmp_path):
    one = write_stack(part(), STANDARD, tmp_path / "one")
    three = write_stack(part(), LOADED, tmp_path / "three", threads=2, slab=3)
    assert [(c.name, c.resin) for c in three.channels] == [
        ("m1", "hard"), ("m2", "soft"), ("m3", "hard"), ("m4", "mid"), ("m5", "hard"),
        ("s", "support"),
    ]  # fmt: skip
    for layer in range(one.n_layers):
        a, b = one.bits(layer), three.bits(layer)
        assert (a[0] == b[0] | b[2] | b[4]).all()
        assert not (b[0] & b[2]).any()
        assert (a[1:3] == b[[1, 3]]).all()
    sites = [three.channels[k].sites for k in (0, 2, 4)]
    assert sum(sites) == one.channels[0].sites
    assert max(sites) < 1.1 * min(sites)
    assert three.volumes_mm3 == pytest.approx(one.volumes_mm3)
    assert three.designed_mm3 == pytest.approx(one.designed_mm3)
    assert not [f for f in preflight(three, part()) if f.severity == "stop"]
    a, b = average(one, part().grid), average(three, part().grid)
    assert a.resins == b.resins
    for x, y in zip(a.filled, b.filled, strict=True):
        assert (x == y).all()
    again = write_stack(part(), LOADED, tmp_path / "again", threads=1, slab=100)
    for channel in range(6):
        assert three.channels[channel].sha256 == again.channels[channel].sha256


# ---------------------------------------------------------------- several parts
def two_parts(profile=STANDARD):
    first = placed(part(), profile, position=(50.013, 60.0), name="left")
    second = placed(
        part(), profile, orientation=["z 90"], position=(55.0, 63.0), name="right", kind="coupon"
    )
    items = [
        PlacedPart(part=p.part, raster=on_whole_bytes(p.raster), name=p.name, kind=p.kind)
        for p in (first, second)
    ]
    window = tray_window([p.raster for p in items], profile)
    return PrintJob(
        profile=profile,
        parts=items,
        window=window,
        channels=profile.assign(["hard", "soft", "mid"]),
        support="none",
        notes={"job number": "T-7"},
    )


@pytest.mark.parametrize("corner", ["front left", "back right"])
@pytest.mark.parametrize("rows", ["x", "y"])
def test_each_part_of_a_tray_is_what_it_is_alone(tmp_path, corner, rows):
    profile = STANDARD.replace(origin_corner=corner, row_direction=rows)
    job = two_parts(profile)
    stack = write_job(job, tmp_path / "tray")
    assert [(p.name, p.kind) for p in stack.parts] == [("left", "part"), ("right", "coupon")]
    assert stack.manifest["notes"] == {"job number": "T-7"}
    for number, item in enumerate(job.parts):
        alone_job = PrintJob(
            profile=profile, parts=(item,), window=item.raster, channels=job.channels
        )  # fmt: skip
        alone = write_job(alone_job, tmp_path / f"alone-{number}")
        for layer in range(0, alone.n_layers, 3):
            assert (stack.part_bits(number, layer) == alone.bits(layer)).all()
            whole, cropped = stack.bits(layer), alone.bits(layer)
            r, c, _ = stack.crop(item.name)
            pixels = np.unpackbits(whole, axis=2)[:, r, c]
            assert (pixels == np.unpackbits(cropped, axis=2)[:, :, : pixels.shape[2]]).all()
        a = stack_to_part(stack, item.part, which=item.name)
        b = stack_to_part(alone, item.part)
        assert (a.labels == b.labels).all()
        assert (a.occupancy == b.occupancy).all()
        # A pixel of the tray is the same place in the part as the part's own pixel.
        z, y, x = stack.parts[number].start
        assert stack.locate(z + 2, y + 3, x + 4) == (
            item.name, item.raster.pixel_to_part(2, 3, 4)
        )  # fmt: skip
    again = read_stack(tmp_path / "tray")
    assert again.parts == stack.parts
    assert stack.designed_mm3["hard"] == pytest.approx(2 * alone.designed_mm3["hard"])


def test_a_pixel_of_no_part_is_told_in_tray_coordinates(tmp_path):
    stack = write_job(two_parts(), tmp_path / "tray")
    shape = stack.raster.image_shape
    name, place = stack.locate(0, shape[1] - 1, 0)
    assert name == ""
    low = [float(o * p) for o, p in zip(stack.raster.offset, stack.raster.pitch, strict=True)]
    assert place[0] == pytest.approx(low[0] + stack.pitch_mm[0] / 2)
    assert place[1] == pytest.approx(low[1] + (shape[1] - 0.5) * stack.pitch_mm[1])
    with pytest.raises(InputError, match="'left', 'right'"):
        stack.part("middle")


# ---------------------------------------------------------------- what cannot be a job
def test_what_cannot_be_a_job():
    good = one_part_job(part(), STANDARD)
    item = good.parts[0]
    other = PlacedPart(
        part=part().replace(resins=(resin("hard", 5.0), *part().resins[1:])),
        raster=item.raster,
        name="b",
    )
    moved = placed(part(), STANDARD, position=(20, 20), name="b")
    for changes, words in (
        ({"parts": ()}, "at least one part"),
        ({"parts": (item, item)}, "name of its own"),
        ({"parts": (item, other)}, "other data for resin 'hard'"),
        ({"parts": (item, moved)}, "inside the window"),
        ({"channels": {"m9": "hard"}}, "lays its resins through channels"),
        ({"channels": {}}, "lays its resins through channels"),
        ({"channels": {"support": "hard"}}, "cannot lay a resin"),
        ({"support": "stilts"}, "support policy"),
        ({"seed": -1}, "seed"),
    ):
        with pytest.raises(InputError, match=words):
            good.replace(**changes)
    with pytest.raises(InputError, match="one of part, mark, coupon"):
        PlacedPart(part=part(), raster=item.raster, name="x", kind="statue")
    with pytest.raises(InputError, match="needs a name"):
        PlacedPart(part=part(), raster=item.raster, name="")


def test_notes_and_channels_decide_the_digest():
    job = one_part_job(part(), STANDARD)
    assert job.digest() == one_part_job(part(), STANDARD).digest()
    assert job.digest() != job.replace(notes={"a": 1}).digest()
    assert job.digest() != job.replace(seed=4).digest()
    assert job.digest() != job.digest({"a.stl": "0" * 64})
    assert HARD.name in job.resins
    assert len(list(Dealer(job).planes(np.zeros((4, 8), np.uint8), 0))) == 4

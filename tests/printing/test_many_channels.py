"""Forty resins in 255 channels: every kind of file, and memory that does not grow with them."""

import tracemalloc

import numpy as np
import pytest
from print_twins import resin

from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.image import ImageLayout
from voxelmat.model.part import Part
from voxelmat.printing.halftone import packed_planes
from voxelmat.printing.imagefiles import ImageFiles
from voxelmat.printing.job import one_part_job
from voxelmat.printing.profile import load_profile
from voxelmat.printing.readback import read_stack
from voxelmat.printing.stack import write_stack

NAMES = [f"r{m:02d}" for m in range(40)]


def row_of_blends():
    """A bar of 39 blends: one part of the first resin and two of another."""
    labels = np.repeat(np.arange(1, 40, dtype=np.uint16)[:, None, None], 2, axis=1)
    return Part(
        grid=VoxelGrid(shape=(39, 2, 1), spacing=(0.3, 0.6, 0.3)),
        resins=tuple(resin(name) for name in NAMES),
        palette=(EMPTY, *(Blend.of({"r00": 1, name: 2}) for name in NAMES[1:])),
        labels=labels,
    )


def profile(kind="png bitmap"):
    channels = {f"c{c:03d}": NAMES[c % 40] for c in range(254)}
    return load_profile("invented-standard").replace(
        channels={**channels, "s": "support"},
        support_channel="s",
        support_policy="columns",
        image=ImageLayout(kind=kind),
    )


@pytest.mark.parametrize("kind", ["png bitmap", "png index"])
def test_forty_resins_in_255_channels(tmp_path, kind):
    part = row_of_blends()
    write_stack(part, profile(kind), tmp_path / "s")
    stack = read_stack(tmp_path / "s")
    assert len(stack.channels) == 255
    designed = part.volumes()
    for name in NAMES:
        found = [c for c in stack.channels if c.resin == name]
        assert len(found) == (7 if NAMES.index(name) < 14 else 6)
        assert all(c.sites > 0 for c in found)
        # Ten layers and some 1000 sites a blend: 4 standard deviations of independent droplets
        # (K3), and the rounding of a bar to whole sites.
        assert stack.volumes_mm3[name] == pytest.approx(designed[name], rel=0.15)
    whole = np.zeros(stack.bits(0).shape[1:], np.uint8)
    for plane in stack.bits(3)[:-1]:
        assert not (whole & plane).any()
        whole |= plane
    assert whole.any()


def test_memory_of_a_layer_does_not_grow_with_the_channels():
    sites = (np.indices((512, 2048)).sum(axis=0) % 250).astype(np.uint8)
    peak = {}
    for n in (8, 240):
        list(packed_planes(sites[:8], n))  # compile
        tracemalloc.start()
        total = sum(int(np.bitwise_count(p).sum()) for p in packed_planes(sites, n))
        peak[n] = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
        assert total == np.count_nonzero((sites > 0) & (sites <= n))
    # Eight planes of bits take what the sites take; the last of a group is in use while the
    # next group is packed.
    assert peak[240] < 2.2 * sites.size


def test_planes_are_written_one_by_one(tmp_path):
    job = one_part_job(row_of_blends(), profile())
    images = ImageFiles(job.window, job.channel_names, job.profile)
    for folder in images.folders:
        (tmp_path / folder).mkdir()
    _, rows, columns = job.window.image_shape
    written = []

    def planes():
        for channel in range(255):
            written.append(len(list(tmp_path.glob("*/*.png"))))
            yield np.full((rows, (columns + 7) // 8), channel, np.uint8)

    record = images.write(tmp_path, 0, planes())
    assert written == list(range(255))
    assert record.sites[255 - 1] == rows * ((columns + 7) // 8) * (254).bit_count()

"""Part stores: what goes in comes out, interrupted fills go on, damage is found."""

import json
import shutil
import sys
from pathlib import Path

import numpy as np
import pytest

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from print_twins import HARD, MID, SOFT, layered_part

from voxelmat.errors import FileFormatError, InputError, ResourceError
from voxelmat.io.bigpart import KINDS, open_big_part, z_slabs
from voxelmat.io.bigpart_write import SLAB, fill_big_part, save_big_part
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid

GRID = VoxelGrid(shape=(9, 5, 3 * SLAB + 2), spacing=(0.3, 0.4, 0.5), origin=(1.0, 2.0, 0.0))
PALETTE = (EMPTY, Blend.pure("hard"), Blend.of({"hard": 1, "soft": 2}))


def make(first, last):
    """An invented pattern with no two planes the same."""
    i, j, k = np.ogrid[:9, :5, first:last]
    return {
        "labels": ((i + 2 * j + 3 * k) % 3).astype(np.uint16),
        "distance": ((i - j + 5 * k) % 200 - 100).astype(np.int8),
    }


def fill(folder, maker=make, **options):
    return fill_big_part(
        folder, maker, grid=GRID, resins=(HARD, SOFT, MID), palette=PALETTE, **options
    )


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("outline", ["distance", "occupancy", "voxels"])
def test_a_part_comes_back_the_same(tmp_path, kind, outline):
    part = layered_part(outline, shape=(7, 6, 2 * SLAB + 1))
    saved = save_big_part(part, tmp_path / "store", kind=kind)
    opened = open_big_part(tmp_path / "store")
    assert opened.digest == saved.digest
    assert opened.load(part.law).digest == part.digest
    block = (slice(1, 4), slice(2, 3), slice(5, 12))
    assert np.array_equal(opened.labels[block], part.labels[block])
    assert opened.labels[block].flags.f_contiguous
    assert np.array_equal(opened.palette_fractions(), part.palette_fractions())
    assert np.array_equal(opened.printed_labels(), part.printed_labels())
    assert {p.name for p in tmp_path.iterdir()} == {"store", ".store.lock"}


def test_both_kinds_have_one_digest(tmp_path):
    digests = {fill(tmp_path / kind, kind=kind).digest for kind in KINDS}
    assert len(digests) == 1


@pytest.mark.parametrize("kind", KINDS)
def test_an_interrupted_fill_goes_on(tmp_path, kind):
    whole = fill(tmp_path / "whole", kind=kind)
    asked = []

    def stops(first, last):
        if first >= 2 * SLAB:
            raise KeyboardInterrupt
        return make(first, last)

    def notes(first, last):
        asked.append(first)
        return make(first, last)

    with pytest.raises(KeyboardInterrupt):
        fill(tmp_path / "s", stops, kind=kind)
    assert not (tmp_path / "s").exists()
    with pytest.raises(FileFormatError, match="not a finished part store"):
        open_big_part(tmp_path / "s.partial")
    with (tmp_path / "s.partial" / "journal.jsonl").open("a") as handle:
        handle.write('{"slab": 2, "sh')
    again = fill(tmp_path / "s", notes, kind=kind)
    assert asked == [2 * SLAB, 3 * SLAB]
    assert again.digest == whole.digest
    assert open_big_part(tmp_path / "s").digest == whole.digest


def test_another_source_does_not_take_over(tmp_path):
    def stops(first, last):
        if first:
            raise KeyboardInterrupt
        return make(first, last)

    with pytest.raises(KeyboardInterrupt):
        fill(tmp_path / "s", stops, source="one")
    asked = []

    def notes(first, last):
        asked.append(first)
        return make(first, last)

    fill(tmp_path / "s", notes, source="two")
    assert asked[0] == 0


@pytest.mark.parametrize("kind", KINDS)
def test_damage_is_found(tmp_path, kind):
    fill(tmp_path / "s", kind=kind)
    files = [p for p in (tmp_path / "s").rglob("*") if p.is_file() and p.suffix != ".json"]
    victim = max((p for p in files if "distance" in str(p)), key=lambda p: p.stat().st_size)
    data = bytearray(victim.read_bytes())
    data[len(data) // 2] ^= 16
    victim.write_bytes(data)
    with pytest.raises(FileFormatError, match=r"damaged|cannot be read"):
        open_big_part(tmp_path / "s")
    if kind == "zarr":  # a checksum a chunk finds it on reading, too
        part = open_big_part(tmp_path / "s", verify=False)
        with pytest.raises(FileFormatError, match="cannot be read"):
            part.load()
    victim.unlink()
    with pytest.raises(FileFormatError):
        open_big_part(tmp_path / "s")


@pytest.mark.parametrize(
    "change",
    [
        lambda head: head.update(format="other"),
        lambda head: head.update(format_number=2),
        lambda head: head.update(kind="tape"),
        lambda head: head["grid"].update(shape=[9, 5, 27]),
        lambda head: head["grid"].update(shape=[5, 9, 26]),
        lambda head: head["arrays"].pop("labels"),
        lambda head: head["arrays"]["labels"].pop(),
        lambda head: head["palette"].pop(),
        lambda head: head.update(resins=[]),
        lambda head: head.update(arrays=["labels"]),
        lambda head: head.update(grid=[1, 2]),
        lambda head: head.update(slab=0),
        lambda head: head.update(slab="../x"),
    ],
)
def test_a_head_edited_by_hand_is_refused(tmp_path, change):
    fill(tmp_path / "s", kind="maps")
    path = tmp_path / "s" / "part.json"
    head = json.loads(path.read_text())
    change(head)
    path.write_text(json.dumps(head))
    with pytest.raises(FileFormatError):
        open_big_part(tmp_path / "s", verify=False)


def test_bad_slabs_and_folders(tmp_path):
    def past(first, last):
        return {**make(first, last), "labels": np.full((9, 5, last - first), 3, np.uint16)}

    def wrong_type(first, last):
        return {**make(first, last), "distance": np.zeros((9, 5, last - first))}

    with pytest.raises(InputError, match="past the palette"):
        fill(tmp_path / "a", past)
    with pytest.raises(InputError, match="must have"):
        fill(tmp_path / "b", wrong_type)
    with pytest.raises(InputError, match="were announced"):
        fill(tmp_path / "c", lambda a, b: {"labels": make(a, b)["labels"]})
    with pytest.raises(InputError, match="one of zarr, maps"):
        fill(tmp_path / "d", kind="tape")
    with pytest.raises(InputError, match="has labels"):
        fill(tmp_path / "e", arrays=("distance",))
    (tmp_path / "f").mkdir()
    with pytest.raises(ResourceError, match="exists already"):
        fill(tmp_path / "f")
    (tmp_path / "g.partial").mkdir()
    (tmp_path / "g.partial" / "thesis.txt").write_text("years of work")
    with pytest.raises(ResourceError, match="not an unfinished"):
        fill(tmp_path / "g")
    assert (tmp_path / "g.partial" / "thesis.txt").exists()
    with pytest.raises(FileFormatError):
        open_big_part(tmp_path / "nowhere")
    assert not any((tmp_path / n).exists() for n in "abcdeg")


def test_a_missing_chunk_is_not_read_as_empty_space(tmp_path):
    fill(tmp_path / "s", kind="zarr")
    shutil.rmtree(tmp_path / "s" / "labels.zarr" / "c" / "1")
    with pytest.raises(FileFormatError, match="planes 4 to 7"):
        open_big_part(tmp_path / "s")


def test_slabs_along_z_cover_the_part():
    part = layered_part("voxels", shape=(7, 6, 5))
    assert list(z_slabs(part, 42 * 2)) == [(0, 2), (2, 4), (4, 5)]
    assert list(z_slabs(part)) == [(0, 5)]

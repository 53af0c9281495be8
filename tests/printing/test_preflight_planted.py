"""Preflight finds each planted defect, at its place, and nothing in a sound stack."""

import dataclasses
import hashlib
import json

import numpy as np
import pytest
from print_twins import HARD, SOFT, layered_part
from scipy import ndimage

from voxelmat.io.png import decode_bitmap, encode_bitmap
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part
from voxelmat.printing import scan as scan_module
from voxelmat.printing.bands import split_rows
from voxelmat.printing.preflight import preflight
from voxelmat.printing.profile import load_profile
from voxelmat.printing.readback import read_stack
from voxelmat.printing.stack import write_stack

STANDARD = load_profile("invented-standard")
PALETTE = (EMPTY, Blend.pure("hard"), Blend.pure("soft"), Blend.of({"hard": 1, "soft": 2}))
GRID = VoxelGrid(shape=(20, 12, 12), spacing=(0.25, 0.25, 0.25), origin=(5.0, 0.0, -1.0))


def made(labels):
    return Part(grid=GRID, resins=(HARD, SOFT), palette=PALETTE, labels=labels)


def slab():
    """A sound block of two pure halves and a dithered top."""
    labels = np.ones(GRID.shape, np.uint16)
    labels[10:] = 2
    labels[:, :, 8:] = 3
    return labels


def written(tmp_path, labels, **options):
    return write_stack(made(labels), STANDARD, tmp_path / "s", **options)


def only(findings, code):
    found = [f for f in findings if f.code == code]
    assert found, f"{code} not among {[f.code for f in findings]}"
    return found[0]


def codes(findings):
    return {f.code for f in findings}


def near(place, wanted, by=0.3):
    assert all(abs(a - b) <= by for a, b in zip(place, wanted, strict=True)), (place, wanted)


def test_a_sound_stack_has_no_findings(tmp_path):
    stack = written(tmp_path, slab())
    assert preflight(stack, made(slab()), STANDARD) == []
    assert preflight(tmp_path / "s") == []


@pytest.mark.parametrize("name", ["invented-standard", "invented-fine"])
def test_a_curved_graded_part_stops_nothing(tmp_path, name):
    part = layered_part("distance", shape=(24, 22, 20), pure=name == "invented-fine")
    stack = write_stack(part, load_profile(name), tmp_path / "s", orientation=["x 90"])
    assert [f for f in preflight(stack) if f.severity == "stop"] == []


def test_a_floating_piece(tmp_path):
    labels = slab()
    labels[:, :, 8:] = 0
    labels[3:7, 3:7, 10:] = 1
    stack = written(tmp_path, labels, support="none")
    found = only(preflight(stack), "floating piece")
    assert found.severity == "stop"
    near(found.place_mm, (5.85, 0.85, 1.5))
    assert float(found.message.split()[3]) == pytest.approx(0.5, rel=0.02)
    machine = written(tmp_path, labels, support="machine")
    assert only(preflight(machine), "floating piece").severity == "note"
    columns = written(tmp_path, labels, support="columns")
    assert "floating piece" not in codes(preflight(columns))
    assert "separate pieces" in codes(preflight(columns))


def test_a_sealed_cavity(tmp_path):
    labels = slab()
    labels[4:8, 4:8, 3:6] = 0
    found = only(preflight(written(tmp_path, labels)), "sealed cavity")
    assert float(found.message.split()[3]) == pytest.approx(0.75, rel=0.02)
    near(found.place_mm, (6.1, 1.1, -0.2))
    labels[4:8, 0:8, 3:6] = 0  # a drain
    assert "sealed cavity" not in codes(preflight(written(tmp_path, labels)))


def test_a_thin_wall_and_a_thin_gap(tmp_path):
    labels = slab()
    labels[:, :, 6:] = 0
    labels[8:9, 2:10, 6:12] = 1  # 0.25 mm, minimum 0.5
    found = only(preflight(written(tmp_path, labels), deep=False), "thin wall or strut")
    near(found.place_mm, (7.1, 0.6, 1.2), by=0.5)
    assert found.limit == 0.5
    named = codes(preflight(written(tmp_path, labels)))  # in three dimensions a wall is a wall
    assert "wall under minimum" in named
    assert not {"strut under minimum", "thin wall or strut"} & named
    labels[8:10, 2:10, 6:12] = 1  # 0.5 mm
    assert "thin wall or strut" not in codes(preflight(written(tmp_path, labels), deep=False))
    labels = slab()
    labels[8:9, :, 2:] = 0  # a slot of 0.25 mm, minimum 0.4, open above and at its ends
    found = only(preflight(written(tmp_path, labels), deep=False), "thin gap")
    assert found.limit == 0.4
    labels[8:10, :, 2:] = 0
    assert "thin gap" not in codes(preflight(written(tmp_path, labels), deep=False))


def test_thin_layers_of_a_dithered_channel_are_no_defect(tmp_path):
    labels = np.full(GRID.shape, 3, np.uint16)
    assert preflight(written(tmp_path, labels)) == []


def edit(stack, channel, layer, change, *, sign=True):
    """Change one image; `sign` writes its new digest and count to the manifest as well."""
    path = stack.path(channel, layer)
    bitmap = decode_bitmap(path.read_bytes())
    plane = np.unpackbits(bitmap.bits, axis=1, count=bitmap.width)
    before = int(plane.sum())
    plane = change(plane)
    data = encode_bitmap(np.packbits(plane, axis=1), bitmap.width, bitmap.pixels_per_metre)
    path.write_bytes(data)
    if sign:
        manifest = stack.folder / "manifest.json"
        plain = json.loads(manifest.read_text())
        entry = plain["channels"][channel]
        entry["sha256"][layer] = hashlib.sha256(data).hexdigest()
        entry["sites"] += int(plane.sum()) - before
        manifest.write_text(json.dumps(plain))
    return read_stack(stack.folder)


def test_two_materials_at_one_site(tmp_path):
    stack = written(tmp_path, slab())

    def claim(plane):
        plane[20, 90:93] = 1  # row 20, columns 90 to 92 lie in the soft half
        return plane

    stack = edit(stack, 0, 30, claim)
    found = only(preflight(stack), "two materials")
    assert (found.severity, found.value) == ("stop", 3)
    near(found.place_mm, stack.raster.pixel_to_part(30, 20, 90), by=1e-9)
    assert "channel shifted" not in codes(preflight(stack))


def test_specks_and_pinholes(tmp_path):
    labels = slab()
    labels[:, :, 8:] = 0
    labels[0, 0, :] = 1  # keeps the window tall
    stack = written(tmp_path, labels)

    def speck(plane):
        plane[30, 100] = 1
        return plane

    def pinhole(plane):
        plane[20, 20] = 0
        return plane

    stack = edit(edit(stack, 1, 90, speck), 0, 10, pinhole)
    found = preflight(stack)
    assert only(found, "specks").value == 1
    near(only(found, "specks").place_mm, stack.raster.pixel_to_part(90, 30, 100), by=1e-9)
    assert only(found, "pinholes").value == 1
    near(only(found, "pinholes").place_mm, stack.raster.pixel_to_part(10, 20, 20), by=1e-9)


@pytest.mark.parametrize(("rows", "columns"), [(0, 2), (-1, 0), (2, -3)])
def test_a_shifted_channel(tmp_path, rows, columns):
    labels = slab()
    labels[6:14, 4:8, :] = 2
    labels[:6] = 1
    stack = written(tmp_path, labels)
    for layer in range(stack.n_layers):
        stack = edit(stack, 0, layer, lambda p: ndimage.shift(p, (rows, columns), order=0))
    found = only(preflight(stack), "channel shifted")
    assert "'m1'" in found.message or "'m2'" in found.message
    wanted = (rows, columns) if "'m2'" in found.message else (-rows, -columns)
    assert f"{wanted[1]} columns and {wanted[0]} rows" in found.message


def test_changed_missing_and_extra_files(tmp_path):
    stack = written(tmp_path, slab())
    stack = edit(stack, 0, 7, lambda p: p * 0, sign=False)
    stack.path(1, 9).unlink()
    stack.path(1, 11).write_bytes(b"nonsense")
    (stack.folder / "m1" / "99999.png").write_bytes(b"x")
    found = preflight(stack)
    assert only(found, "changed layer").value == 2
    assert "layer 7 of channel 'm1'" in only(found, "changed layer").message
    unreadable = [f.message for f in found if f.code == "unreadable layer"]
    assert any("m2/00009.png is missing" in m for m in unreadable)
    assert any("m2/00011.png is not a PNG" in m for m in unreadable)
    assert "m1/99999.png" in only(found, "extra files").message
    assert only(found, "other count").severity == "stop"
    assert found[0].severity == "stop"
    assert found[-1].severity != "stop"


def test_volumes_against_the_design(tmp_path):
    stack = written(tmp_path, slab())
    other = slab()
    other[:14, :, :8] = 1
    found = only(preflight(stack, made(other)), "volume")
    assert found.unit == "mm^3"
    assert found.value != found.limit


def test_a_thin_zone_of_one_resin_in_another(tmp_path):
    labels = slab()
    labels[2:6, 4:8, 2:3] = 2  # 0.25 mm of soft in hard
    stack = written(tmp_path, labels)
    profile = STANDARD.replace(minimum=dataclasses.replace(STANDARD.minimum, feature=0.5))
    found = only(preflight(stack, made(labels), profile), "thin zone")
    near(found.place_mm, (5.6, 1.1, -0.4))
    assert found.severity == "note"
    assert found.value == pytest.approx(0.25)
    labels[2:6, 4:8, 2:4] = 2
    assert "thin zone" not in codes(preflight(written(tmp_path, labels), made(labels), profile))
    labels[2:6, 4:8, 3:5] = 3  # goes on into a blend of two thirds soft
    assert "thin zone" not in codes(preflight(written(tmp_path, labels), made(labels), profile))


def test_a_printer_that_does_not_suit(tmp_path):
    stack = written(tmp_path, slab())
    found = preflight(stack, profile=load_profile("invented-fine"))
    assert "other pitch" in codes(found)
    small = STANDARD.replace(tray_size=(200.0, 150.0, 2.0))
    found = preflight(stack, profile=small)
    assert len([f for f in found if f.code == "outside the tray"]) == 3


def test_bands_of_rows_find_the_same(tmp_path, monkeypatch):
    labels = slab()
    labels[:, :, 6:] = 0
    labels[8:9, 2:10, 6:12] = 1
    labels[14:, 5:6, 6:12] = 2
    labels[12:13, :, 2:6] = 0
    stack = written(tmp_path, labels)
    sizes = ((16, 5, 11), (13, 4, 9))
    whole = scan_module.scan(stack, *sizes)
    monkeypatch.setattr(scan_module, "_MEMORY", 90_000)
    banded = scan_module.scan(stack, *sizes)
    planes = 7 * sum(s[0] for s in sizes)
    assert len(split_rows((36, 128), planes, scan_module._reach(sizes), 90_000)) > 1
    for kind in ("walls", "gaps"):
        one, many = getattr(whole, kind), getattr(banded, kind)
        assert sum(p.sites for p in one) == sum(p.sites for p in many) > 0
        assert len(many) >= len(one)
        for piece in many:
            column, row, layer = piece.place
            assert (stack.layer(layer)[column, row] == 0) == (kind == "gaps")
    assert banded.sites == whole.sites
    assert banded.part == whole.part

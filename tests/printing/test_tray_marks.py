"""Marks: on tags and engraved, found again, and a mirrored, turned or moved tray caught."""

import hashlib
import json
import shutil

import numpy as np
import pytest
from print_twins import HARD, SOFT

from voxelmat.errors import InputError
from voxelmat.io.png import decode_bitmap, encode_bitmap
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part
from voxelmat.printing.coupons import BLOCK_MM, STEPS, coupons_of
from voxelmat.printing.engrave import FACES, engraved
from voxelmat.printing.findmark import SYMMETRIES, find_marks, mark_findings
from voxelmat.printing.glyphs import CHARACTERS, text_cells
from voxelmat.printing.marks import Mark, mark_cells, mark_text
from voxelmat.printing.place import rotation_matrix
from voxelmat.printing.preflight import preflight
from voxelmat.printing.profile import load_profile
from voxelmat.printing.readback import read_stack
from voxelmat.printing.support import outline_field
from voxelmat.printing.tray import TrayEntry, lay_out, write_tray

STANDARD = load_profile("invented-standard")
COARSE = load_profile("invented-coarse")


def brick(shape=(40, 30, 24), spacing=(0.6, 0.6, 0.6), distance=True):
    """A brick with two voxels of air all round."""
    labels = np.zeros(shape, dtype=np.uint16)
    labels[2:-2, 2:-2, 2:-2] = 1
    options = {}
    if distance:
        axes = [
            np.minimum(np.arange(n) + 0.5 - 2, n - 2 - np.arange(n) - 0.5) * h
            for n, h in zip(shape, spacing, strict=True)
        ]
        depth = np.minimum(np.minimum(axes[0][:, None, None], axes[1][:, None]), axes[2])
        options["distance"] = np.clip(np.rint(-depth * 16 / min(spacing)), -127, 127).astype(
            np.int8
        )
        options["occupancy"] = np.where(labels > 0, 255, 0).astype(np.uint8)
    return Part(
        grid=VoxelGrid(shape=shape, spacing=spacing, origin=(3.0, -1.0, 2.0)),
        resins=(HARD, SOFT),
        palette=(EMPTY, Blend.pure("hard")),
        labels=labels,
        name="brick",
        **options,
    )


def rewritten(folder, change):
    """Rewrite every image and its digest, as someone would who turns images on the way."""
    path = folder / "manifest.json"
    data = json.loads(path.read_text())
    shape = (data["image"]["height"], data["image"]["width"])
    files = [sorted((folder / c["name"]).glob("*.png")) for c in data["channels"]]
    for channel, own in zip(data["channels"], files, strict=True):
        images = []
        for file in own:
            bitmap = decode_bitmap(file.read_bytes(), file.name)
            images.append(np.unpackbits(bitmap.bits, axis=1)[:, : bitmap.width])
        digests = []
        for file, image in zip(own, change(images), strict=True):
            out = np.zeros(shape, dtype=np.uint8)
            part = image[: shape[0], : shape[1]]
            out[: part.shape[0], : part.shape[1]] = part
            packed = np.packbits(out, axis=1)
            raw = encode_bitmap(packed, shape[1], tuple(data["image"]["pixels_per_metre"]))
            file.write_bytes(raw)
            digests.append(hashlib.sha256(raw).hexdigest())
        channel["sha256"] = digests
    path.write_text(json.dumps(data))
    return read_stack(folder)


@pytest.fixture(scope="module")
def stack(tmp_path_factory):
    flat = Part.uniform(VoxelGrid(shape=(1, 1, 1), spacing=(14.0, 12.0, 3.0)), HARD, name="flat")
    tray = lay_out([TrayEntry(part=flat, copies=2, side="left")], COARSE, job_number="J7")
    return write_tray(tray, tmp_path_factory.mktemp("marks") / "tray")


def test_marks_of_a_good_tray_are_found_in_their_places(stack):
    found = list(find_marks(stack))
    assert [m.part for m, *_ in found] == ["flat 1", "flat 2"]
    assert found[1][0].text == ("J7-2", ">X^Yl")
    assert all(score == 1.0 and how == "" for _, score, how, _ in found)
    assert mark_findings(stack) == []


@pytest.mark.parametrize(
    ("change", "code", "words"),
    [
        (lambda n: [i[:, ::-1] for i in n], "tray mirrored", "columns run backwards"),
        (lambda n: [i[::-1] for i in n], "tray mirrored", "rows run backwards"),
        (lambda n: [i[::-1, ::-1] for i in n], "tray turned", "rows run backwards and columns"),
        (lambda n: n[::-1], "tray mirrored", "layers run downwards"),
        (lambda n: [np.roll(i, 9, axis=1) for i in n], "tray moved", "along"),
        (lambda n: [i * 0 for i in n], "mark not found", "not at its place"),
    ],
)
def test_a_tray_whose_images_lie_wrongly_is_stopped(stack, tmp_path, change, code, words):
    folder = shutil.copytree(stack.folder, tmp_path / "s")
    found = mark_findings(rewritten(folder, change))
    assert {f.code for f in found} == {code}
    assert len(found) == 2
    assert all(f.severity == "stop" and words in f.message for f in found)


def test_swapped_rows_and_columns_are_caught(tmp_path):
    flat = Part.uniform(VoxelGrid(shape=(1, 1, 1), spacing=(20.0, 20.0, 2.0)), HARD, name="flat")
    # Pitches differ, so a swapped image is distorted as well; the square window keeps it whole.
    profile = COARSE.replace(tray_size=(90.0, 90.0, 60.0))
    tray = lay_out([TrayEntry(part=flat)], profile, job_number="J7", coupons=False)
    stack = write_tray(tray, tmp_path / "s")
    found = mark_findings(rewritten(stack.folder, lambda n: [i.T for i in n]))
    assert [f.severity for f in found] == ["stop"]
    assert found[0].code == "tray mirrored"
    assert "swapped" in found[0].message


def test_a_mark_is_never_like_its_mirror_image():
    assert len(set(SYMMETRIES)) == 8
    assert sum(s.mirrored for s in SYMMETRIES) == 4
    for number in range(1, 30):
        mark_cells(mark_text("J1", number))
    with pytest.raises(InputError, match="mirror image"):
        mark_cells(("H0H",))
    with pytest.raises(InputError, match="written with"):
        mark_cells(mark_text("J_1", 1))


def test_characters_differ_from_each_other():
    glyphs = {text_cells((c,)).tobytes() for c in CHARACTERS if c != " "}
    assert len(glyphs) == len(CHARACTERS) - 1
    assert text_cells(("A", "BC")).shape == (13, 17)


@pytest.mark.parametrize("face", FACES)
@pytest.mark.parametrize("turns", [(), ("x 90", "z 90")])
def test_engraved_cells_are_where_the_mark_says(face, turns):
    part = brick((44, 44, 44))
    made = engraved(
        part, STANDARD, job_number="J", number=3, side="right", orientation=turns, face=face
    )
    assert made is not None
    changed, mark, chosen = made
    assert chosen == face
    points, solid = mark.samples()
    index = np.floor((points - part.grid.origin) / part.grid.spacing).astype(int)
    inside = outline_field(changed) < 0
    assert (inside[tuple(index.T)] == solid).all()
    assert (~solid).sum() > 50
    assert solid[len(solid) // 2 :].all()
    # Seen from outside: text to the right, then up, then towards the eye, right-handed.
    turn = rotation_matrix(turns)
    normal = np.cross(turn @ mark.right_mm, turn @ mark.up_mm)
    axis = "xyz".index(face[0])
    assert np.sign(normal[axis]) == (1 if face[1] == "+" else -1)
    # Nothing else changed, and a resin lies behind every stroke.
    lost = (outline_field(part) < 0) & ~inside
    assert lost.sum() == (~solid).sum()
    assert (changed.labels[lost] == 0).all()
    assert (changed.labels > 0).sum() == (part.labels > 0).sum() - lost.sum()


@pytest.mark.parametrize("distance", [True, False])
def test_an_engraved_part_is_found_in_the_stack(tmp_path, distance):
    entry = TrayEntry(part=brick(distance=distance), mark="engraved")
    tray = lay_out([entry], STANDARD, job_number="J", coupons=False)
    assert [p.kind for p in tray.placed] == ["part"]
    stack = write_tray(tray, tmp_path / "s")
    assert [(how, round(score, 3)) for _, score, how, _ in find_marks(stack)] == [("", 1.0)]
    folder = shutil.copytree(stack.folder, tmp_path / "m")
    assert {f.code for f in mark_findings(rewritten(folder, lambda n: [i[::-1] for i in n]))} <= {
        "tray mirrored",
        "mark not found",
    }


def test_protected_faces_stay_and_a_tag_takes_over():
    part = brick()
    below = np.zeros(part.grid.shape, dtype=bool)
    below[:, :, :4] = True
    made = engraved(part, STANDARD, job_number="J", number=1, protected=below)
    assert made is not None
    assert made[2] != "z-"
    assert not ((made[0].labels != part.labels) & below).any()
    everything = np.ones(part.grid.shape, dtype=bool)
    entry = TrayEntry(part=part, mark="engraved", protected=everything)
    tray = lay_out([entry], STANDARD, job_number="J", coupons=False)
    assert [p.kind for p in tray.placed] == ["part", "mark"]
    assert tray.notes
    assert tray.designs["brick"] is part


def test_coupons_are_as_large_as_they_say_and_never_the_highest():
    for highest in (3.0, 40.0):
        block, stair = coupons_of(HARD, STANDARD, highest_mm=highest)
        height = block.grid.upper[2]
        assert height <= min(highest, BLOCK_MM) + 1e-9
        assert sum(block.volumes().values()) == pytest.approx(BLOCK_MM**2 * height)
        assert stair.grid.upper[2] <= height + 1e-9
        heights = (stair.labels > 0).sum(axis=2)[:, 0] * stair.grid.spacing[2]
        np.testing.assert_allclose(np.diff(heights), heights[0])
        assert len(heights) == STEPS
    with pytest.raises(InputError, match="4 layers"):
        coupons_of(HARD, STANDARD, highest_mm=0.1)
    with pytest.raises(InputError, match="No part of the tray uses 'soft'"):
        lay_out([TrayEntry(part=brick())], STANDARD, coupons=["soft"])


def test_preflight_stops_a_mirrored_tray(stack, tmp_path):
    assert [f for f in preflight(stack, deep=False) if f.severity == "stop"] == []
    folder = shutil.copytree(stack.folder, tmp_path / "s")
    mirrored = rewritten(folder, lambda n: [i[:, ::-1] for i in n])
    found = preflight(mirrored, deep=False)
    assert "tray mirrored" in {f.code for f in found if f.severity == "stop"}
    path = folder / "manifest.json"
    data = json.loads(path.read_text())
    data["notes"]["marks"] = [{"part": "flat 1"}]
    path.write_text(json.dumps(data))
    assert "mark record" in {f.code for f in preflight(folder, deep=False)}


@pytest.mark.parametrize(
    "change", [{"rows": []}, {"rows": ["#", "##"]}, {"origin_mm": [1, 2]}, {"rows": ["x"]}]
)
def test_a_wrong_record_of_a_mark_is_refused(stack, change):
    record = stack.manifest["notes"]["marks"][0]
    assert Mark.from_dict(record).as_dict() == record
    with pytest.raises(InputError):
        Mark.from_dict({**record, **change})


def test_a_printer_with_bias_still_gets_its_marks_where_they_say(tmp_path):
    profile = STANDARD.replace(bias=(0.06, 0.03, 0.02))
    entries = [
        TrayEntry(part=brick(), mark="engraved", name="cut"),
        TrayEntry(part=brick((12, 10, 8)), name="small"),
    ]
    tray = lay_out(entries, profile, job_number="J")
    assert [p.kind for p in tray.placed][:3] == ["part", "part", "mark"]
    stack = write_tray(tray, tmp_path / "s")
    assert [how for _, _, how, _ in find_marks(stack)] == ["", ""]
    block = next(p for p in tray.placed if p.name == "block hard")
    # Witness coupons are laid as drawn, so that measuring them shows the printer's bias.
    assert tray.box_mm(block)[2] == pytest.approx(BLOCK_MM, abs=float(profile.pitch_x))

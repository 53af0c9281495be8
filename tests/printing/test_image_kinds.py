"""Every kind of image and every order, written and read back; each kind by other readers too."""

import hashlib
import json
import shutil
import struct
import zlib

import numpy as np
import png
import pytest
import tifffile
from PIL import Image
from print_twins import layered_part

from voxelmat.errors import Cancelled, FileFormatError, InputError, ResourceError
from voxelmat.io.png import encode_bitmap
from voxelmat.model.image import ImageLayout
from voxelmat.model.process import ProcessFigures
from voxelmat.monitor import CancelFlag
from voxelmat.printing.imagefiles import ImageFiles
from voxelmat.printing.preflight import preflight
from voxelmat.printing.profile import load_profile
from voxelmat.printing.readback import read_stack
from voxelmat.printing.stack import write_stack

STANDARD = load_profile("invented-standard")
LAYOUTS = {
    "plain": {},
    "upside down": {"row_order": "up", "layer_order": "down"},
    "padded": {"pad_to": (8, 64)},
    "mirrored": {"mirrored_passes": True},
    "index": {"kind": "png index"},
    "index padded": {"kind": "png index", "pad_to": (16, 24), "row_order": "up"},
    "tiff": {"kind": "tiff pages", "layer_order": "down"},
    "tiff g4": {"kind": "tiff pages", "compression": "g4", "mirrored_passes": True},
    "tiff low": {
        "kind": "tiff pages", "compression": "g4", "bit_order": "first low", "pad_to": (5, 7),
        "row_order": "up", "layer_order": "down", "mirrored_passes": True,
    },
}  # fmt: skip


def part():
    return layered_part("distance", shape=(6, 5, 4))


def profile_for(name, **changes):
    process = ProcessFigures(swath_mm=0.25)
    return STANDARD.replace(image=ImageLayout(**LAYOUTS[name]), process=process, **changes)


@pytest.fixture(scope="module")
def plain(tmp_path_factory):
    return write_stack(part(), STANDARD, tmp_path_factory.mktemp("plain") / "s")


@pytest.fixture(scope="module")
def stacks(tmp_path_factory):
    folder = tmp_path_factory.mktemp("kinds")
    return {
        name: write_stack(part(), profile_for(name), folder / name.replace(" ", "-"))
        for name in LAYOUTS
    }


@pytest.mark.parametrize("name", LAYOUTS)
def test_the_same_bits_come_back_whatever_the_files_are(plain, stacks, name):
    stack = stacks[name]
    for layer in range(plain.n_layers):
        assert (stack.bits(layer) == plain.bits(layer)).all()
        assert (stack.layer(layer) == plain.layer(layer)).all()
    solid = np.bitwise_or.reduce(plain.bits(2), axis=0)
    assert (stack.solid(2) == solid).all()
    assert [c.sites for c in stack.channels] == [c.sites for c in plain.channels]


@pytest.mark.parametrize("name", LAYOUTS)
def test_preflight_finds_nothing_in_any_kind_that_it_does_not_find_in_plain_ones(
    plain, stacks, name
):
    wanted = [(f.code, f.message) for f in preflight(plain, part())]
    assert [(f.code, f.message) for f in preflight(stacks[name], part())] == wanted


@pytest.mark.parametrize("black", [False, True])
@pytest.mark.parametrize("corner", ["front left", "back right"])
@pytest.mark.parametrize("rows", ["x", "y"])
def test_orders_on_any_tray(tmp_path, black, corner, rows):
    base = STANDARD.replace(origin_corner=corner, row_direction=rows)
    polarity = "black is material" if black else "white is material"
    layout = ImageLayout(row_order="up", pad_to=(3, 10), mirrored_passes=True)
    other = base.replace(
        image=layout, polarity=polarity, process=ProcessFigures(swath_mm=0.25)
    )  # fmt: skip
    one = write_stack(part(), base, tmp_path / "a", support="none")
    two = write_stack(part(), other, tmp_path / "b", support="none")
    for layer in range(0, one.n_layers, 5):
        assert (one.layer(layer) == two.layer(layer)).all()


# ---------------------------------------------------------------- what other readers see
def pixels(plain, channel, layer):
    """Bits of one channel, from the plain stack, as 0 and 1."""
    width = plain.raster.image_shape[2]
    return np.unpackbits(plain.bits(layer)[channel], axis=1, count=width)


def test_rows_upwards_and_layers_downwards_by_pillow(plain, stacks):
    stack, n = stacks["upside down"], plain.n_layers
    for layer in (0, 3, n - 1):
        with Image.open(stack.folder / "m1" / f"{n - 1 - layer:05d}.png") as image:
            assert (np.asarray(image)[::-1] == pixels(plain, 0, layer)).all()


def test_padding_by_pypng(plain, stacks):
    rows, columns = plain.raster.image_shape[1:]
    reader = png.Reader(bytes=(stacks["padded"].folder / "m1" / "00004.png").read_bytes())
    width, height, lines, _ = reader.read()
    assert (height % 8, width % 64) == (0, 0)
    assert 0 <= height - rows < 8
    assert 0 <= width - columns < 64
    table = np.array([list(line) for line in lines])
    assert (table[:rows, :columns] == pixels(plain, 0, 4)).all()
    assert not table[rows:].any()
    assert not table[:, columns:].any()


def test_mirrored_passes_by_pillow(plain, stacks):
    # 0.25 mm of swath are 3 sites of 127/1500 mm; counted from the corner of the tray.
    first = plain.raster.image_offset[1]
    wanted = pixels(plain, 0, 4)
    for row in range(len(wanted)):
        if (first + row) // 3 % 2:
            wanted[row] = wanted[row, ::-1]
    with Image.open(stacks["mirrored"].folder / "m1" / "00004.png") as image:
        assert (np.asarray(image) == wanted).all()
    assert (wanted != pixels(plain, 0, 4)).any()


def test_an_index_image_by_pillow_and_pypng(plain, stacks):
    stack = stacks["index"]
    for layer in (0, 4):
        wanted = sum((m + 1) * pixels(plain, m, layer) for m in range(len(plain.channels)))
        path = stack.folder / "layers" / f"{layer:05d}.png"
        with Image.open(path) as image:
            assert image.mode == "P"
            assert (np.asarray(image) == wanted).all()
            assert len({image.getpalette()[k] for k in range(0, 15, 3)}) > 1
        _, _, lines, info = png.Reader(bytes=path.read_bytes()).read()
        assert (np.array([list(line) for line in lines]) == wanted).all()
        assert len(set(info["palette"])) == len(plain.channels) + 1
    assert {p.name for p in stack.folder.iterdir() if p.is_dir()} == {"layers"}


def test_tiff_pages_by_tifffile_and_pillow(plain, stacks):
    n = plain.n_layers
    with tifffile.TiffFile(stacks["tiff"].folder / "m1.tif") as file:
        assert len(file.pages) == n
        for layer in (0, 4, n - 1):
            found = file.pages[n - 1 - layer].asarray()
            assert (found == pixels(plain, 0, layer)).all()
    first = plain.raster.image_offset[1]
    wanted = pixels(plain, 1, 4)
    for row in range(len(wanted)):
        if (first + row) // 3 % 2:
            wanted[row] = wanted[row, ::-1]
    with Image.open(stacks["tiff g4"].folder / "m2.tif") as image:
        image.seek(4)
        assert (np.asarray(image) == wanted).all()
    names = {p.name for p in stacks["tiff"].folder.iterdir() if p.suffix == ".tif" or p.is_dir()}
    assert names == {"m1.tif", "m2.tif", "m3.tif", "support.tif"}


# ---------------------------------------------------------------- same bytes, resumed, replaced
def files(folder):
    return {
        p.relative_to(folder).as_posix(): hashlib.sha256(p.read_bytes()).hexdigest()
        for p in folder.rglob("*")
        if p.suffix in (".png", ".tif")
    }


@pytest.mark.parametrize("name", ["index", "tiff", "tiff low"])
def test_interrupted_and_resumed_gives_the_same_bytes(tmp_path, stacks, name):
    flag = CancelFlag()

    class Stop:
        def report(self, stage, *, done, total, **figures):
            if done > 5:
                flag.cancel()

    flag._inner = Stop()
    folder = tmp_path / "s"
    with pytest.raises(Cancelled):
        write_stack(part(), profile_for(name), folder, monitor=flag, slab=2, threads=1)
    assert not folder.exists()
    write_stack(part(), profile_for(name), folder, threads=2, slab=3)
    assert files(folder) == files(stacks[name].folder)
    before = (folder / "manifest.json").stat().st_mtime_ns
    write_stack(part(), profile_for(name), folder)
    assert (folder / "manifest.json").stat().st_mtime_ns == before
    write_stack(part(), STANDARD, folder)  # another kind takes its place
    assert {p.name for p in folder.iterdir() if p.is_dir()} == {"m1", "m2", "m3", "support"}
    assert not list(folder.glob("*.tif"))
    assert {p.name for p in tmp_path.iterdir()} == {"s", ".s.lock"}


@pytest.mark.parametrize("where", ["write_pages", "tidy", "publish"])
def test_a_disk_that_fills_up_while_pages_are_joined(tmp_path, monkeypatch, stacks, where):
    target = {
        "write_pages": "voxelmat.printing.imagefiles.write_pages",
        "tidy": "voxelmat.printing.imagefiles.ImageFiles.tidy",
        "publish": "voxelmat.printing.stack.publish",
    }[where]

    def full(*args, **kwargs):
        raise OSError(28, "No space left on device")

    with monkeypatch.context() as patch:
        patch.setattr(target, full)
        with pytest.raises(ResourceError, match=r"No space left.*s\.partial"):
            write_stack(part(), profile_for("tiff"), tmp_path / "s")
    assert not (tmp_path / "s").exists()
    write_stack(part(), profile_for("tiff"), tmp_path / "s")
    assert files(tmp_path / "s") == files(stacks["tiff"].folder)


# ---------------------------------------------------------------- bad files
@pytest.fixture
def copied(tmp_path, stacks):
    def copy(name):
        shutil.copytree(stacks[name].folder, tmp_path / "s")
        return tmp_path / "s"

    return copy


def chunk(kind, data):
    return struct.pack(">I", len(data)) + kind + data + struct.pack(">I", zlib.crc32(kind + data))


def made_png(width, height, depth, colour, raw):
    head = struct.pack(">IIBBBBB", width, height, depth, colour, 0, 0, 0)
    body = chunk(b"IDAT", zlib.compress(raw, 9))
    palette = chunk(b"PLTE", bytes(768)) if colour == 3 else b""
    return b"\x89PNG\r\n\x1a\n" + chunk(b"IHDR", head) + palette + body + chunk(b"IEND", b"")


def bad_files(stack):
    """Files that a hand or a foreign program may have put in place of an image."""
    _, rows, columns = stack.raster.image_shape
    size = rows * (columns + 1)
    return {
        "another size": made_png(columns + 1, rows, 8, 3, bytes(rows * (columns + 2))),
        "another depth": made_png(columns, rows, 16, 0, bytes(rows * (2 * columns + 1))),
        "a bomb": made_png(1 << 19, 1 << 10, 8, 3, bytes((1 << 19) * 100)),
        "a hidden bomb": made_png(columns, rows, 8, 3, bytes(50 * size)),
        "a high number": made_png(columns, rows, 8, 3, b"\0" + b"\xff" * columns * rows),
        "nothing": b"",
        "too large": bytes(10_000_000),
    }


@pytest.mark.parametrize(
    "kind",
    ["another size", "another depth", "a bomb", "a hidden bomb", "a high number", "nothing",
     "too large"],
)  # fmt: skip
def test_a_bad_index_image_is_told_and_not_believed(copied, kind):
    folder = copied("index")
    stack = read_stack(folder)
    stack.path(0, 5).write_bytes(bad_files(stack)[kind])
    with pytest.raises(FileFormatError, match="00005"):
        stack.bits(5)
    codes = {f.code for f in preflight(folder)}
    assert codes & {"unreadable layer", "changed layer"}
    # The digest alone does not save a reader from a bomb: with a matching one it is refused too.
    manifest = json.loads((folder / "manifest.json").read_text())
    manifest["layer_sha256"][5] = hashlib.sha256(bad_files(stack)[kind]).hexdigest()
    (folder / "manifest.json").write_text(json.dumps(manifest))
    with pytest.raises(FileFormatError, match="00005"):
        read_stack(folder).bits(5)


def test_two_channels_on_one_site_have_no_number(stacks):
    stack = stacks["index"]
    images = ImageFiles(stack.raster, ["a", "b"], profile_for("index"))
    bits = stack.bits(4)[[0, 0]]
    with pytest.raises(InputError, match="Two channels"):
        list(images.encode(bits))


def test_droplets_in_the_padding_are_refused(copied):
    folder = copied("padded")
    stack = read_stack(folder)
    path = stack.path(0, 5)
    with Image.open(path) as image:
        ppm = (23622, 11811)
        table = np.asarray(image).copy()
    table[-1, -1] = True
    path.write_bytes(encode_bitmap(np.packbits(table, axis=1), table.shape[1], ppm))
    assert [text for _, text in stack.files.examine(5).bad] == [
        "m1/00005.png holds droplets in the padding of its image."
    ]


def test_a_damaged_tiff_is_told(copied):
    folder = copied("tiff")
    whole = (folder / "m2.tif").read_bytes()
    for spoilt in (whole[:-40], b"II*\0", whole[: len(whole) // 2], b""):
        (folder / "m2.tif").write_bytes(spoilt)
        with pytest.raises(FileFormatError, match=r"m2\.tif"):
            read_stack(folder).bits(3)
    place = 8 + len(whole) // 4  # a byte of some page
    (folder / "m2.tif").write_bytes(whole[:place] + b"\x55" + whole[place + 1 :])
    assert {f.code for f in preflight(folder)} & {"unreadable layer", "changed layer"}
    (folder / "m2.tif").unlink()
    with pytest.raises(FileFormatError, match="missing"):
        read_stack(folder).bits(3)


def test_a_link_out_of_the_folder_is_not_followed(copied, tmp_path):
    folder = copied("tiff")
    other = tmp_path / "elsewhere.tif"
    (folder / "m1.tif").rename(other)
    (folder / "m1.tif").symlink_to(other)
    with pytest.raises(FileFormatError, match="outside the stack"):
        read_stack(folder).bits(0)


@pytest.mark.parametrize(
    "change",
    [
        lambda m: m["image"].update(kind="tiff pages"),
        lambda m: m["image"].update(row_order="up"),
        lambda m: m["image"].update(layer_order="down"),
        lambda m: m["image"].update(width=m["image"]["width"] + 1),
        lambda m: m["image"].update(mirrored_swath_sites=4),
        lambda m: m["image"].update(file_name="../elsewhere.png"),
        lambda m: m["profile"]["image"].update(kind="png bitmap"),
        lambda m: m.pop("layer_sha256"),
        lambda m: m["layer_sha256"].pop(),
        lambda m: m["channels"][0]["sha256"].append("0" * 64),
        lambda m: m["channels"][0].update(name="../m1"),
        lambda m: m["channels"][0].update(name="/m1"),
        lambda m: m["parts"][0]["raster"].update(offset_sites=[0, 0, 0]),
        lambda m: m["parts"].append(m["parts"][0]),
        lambda m: m["parts"].clear(),
        lambda m: m["profile"]["pitch"].update(x_um="0"),
        lambda m: m.update(format_number=1),
    ],
)
def test_a_manifest_edited_by_hand_is_refused(copied, change):
    folder = copied("index")
    manifest = json.loads((folder / "manifest.json").read_text())
    change(manifest)
    (folder / "manifest.json").write_text(json.dumps(manifest))
    with pytest.raises(FileFormatError):
        read_stack(folder)


def test_a_stack_of_format_1_is_still_read(tmp_path, plain):
    shutil.copytree(plain.folder, tmp_path / "s")
    manifest = json.loads((tmp_path / "s" / "manifest.json").read_text())
    (only,) = manifest.pop("parts")
    manifest["part"] = {k: only[k] for k in ("name", "digest", "grid")}
    manifest["format_number"] = 1
    del manifest["notes"], manifest["profile"]["image"], manifest["profile"]["bias_mm"]
    manifest["image"] = {
        **{k: manifest["image"][k] for k in ("layers", "width", "height", "polarity")},
        "layer_order": "layer 0 lies on the tray",
        "file_name": "channel/layer.png, layer with five digits",
        "pixels_per_metre": manifest["image"]["pixels_per_metre"],
    }
    (tmp_path / "s" / "manifest.json").write_text(json.dumps(manifest))
    old = read_stack(tmp_path / "s")
    assert (old.bits(3) == plain.bits(3)).all()
    assert old.parts == plain.parts
    assert old.locate(2, 3, 4) == plain.locate(2, 3, 4)

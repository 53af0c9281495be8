"""Folders and files that the system refuses, and stacks that were tampered with: told, kept."""

import errno
import hashlib
import json
import os
import shutil
import struct
import threading
import zlib
from contextlib import nullcontext
from pathlib import Path

import pytest
from print_twins import layered_part

from voxelmat.errors import FileFormatError, InputError, ResourceError
from voxelmat.model.image import ImageLayout
from voxelmat.model.profile import PrintProfile
from voxelmat.printing.preflight import preflight
from voxelmat.printing.profile import load_profile
from voxelmat.printing.readback import read_stack
from voxelmat.printing.stack import write_stack

STANDARD = load_profile("invented-standard")
KINDS = {
    "bitmap": STANDARD,
    "index": STANDARD.replace(image=ImageLayout(kind="png index")),
    "tiff": STANDARD.replace(image=ImageLayout(kind="tiff pages")),
}


def part():
    return layered_part("distance", shape=(5, 5, 4))


def refusing(number, names):
    """A stand-in for a method of Path that the system refuses for paths with one of `names`."""

    def made(real):
        def call(self, *args, **kwargs):
            if any(name in self.parts or self.name == name for name in names):
                raise OSError(number, os.strerror(number), str(self))
            return real(self, *args, **kwargs)

        return call

    return made


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("number", [errno.EROFS, errno.EACCES, errno.EDQUOT])
def test_a_folder_that_may_not_be_written_to(tmp_path, monkeypatch, kind, number):
    write_stack(part(), STANDARD, tmp_path / "s", seed=9)  # an earlier stack, to be kept
    before = {p: p.read_bytes() for p in (tmp_path / "s").rglob("*") if p.is_file()}
    with monkeypatch.context() as patch:
        for method in ("mkdir", "write_bytes", "write_text"):
            real = getattr(Path, method)
            patch.setattr(Path, method, refusing(number, ["s.partial"])(real))
        with pytest.raises(ResourceError, match=os.strerror(number)):
            write_stack(part(), KINDS[kind], tmp_path / "s")
    assert {p: p.read_bytes() for p in (tmp_path / "s").rglob("*") if p.is_file()} == before
    stack = write_stack(part(), KINDS[kind], tmp_path / "s")
    assert stack.bits(3).any()


def test_a_parent_that_may_not_be_written_to(tmp_path, monkeypatch):
    real = os.open

    def refuse(path, flags, *args, **kwargs):
        if str(path).endswith(".s.lock"):
            raise OSError(errno.EROFS, os.strerror(errno.EROFS), path)
        return real(path, flags, *args, **kwargs)

    monkeypatch.setattr(os, "open", refuse)
    with pytest.raises(ResourceError, match="cannot be written to"):
        write_stack(part(), STANDARD, tmp_path / "s")


@pytest.mark.parametrize("kind", KINDS)
def test_two_writers_at_once(tmp_path, kind):
    inside, go_on = threading.Event(), threading.Event()
    failed = []

    class Hold:
        def report(self, stage, *, done, total, **figures):
            inside.set()
            assert go_on.wait(30)

    def first():
        try:
            write_stack(part(), KINDS[kind], tmp_path / "s", monitor=Hold())
        except Exception as error:  # noqa: BLE001 - told below
            failed.append(error)

    thread = threading.Thread(target=first)
    thread.start()
    try:
        assert inside.wait(30)
        with pytest.raises(ResourceError, match="Another run is writing"):
            write_stack(part(), KINDS[kind], tmp_path / "s", seed=1)
    finally:
        go_on.set()
        thread.join()
    assert not failed
    assert not [f for f in preflight(tmp_path / "s") if f.severity == "stop"]


# ---------------------------------------------------------------- tampered stacks
@pytest.fixture
def stack(tmp_path):
    return write_stack(part(), STANDARD, tmp_path / "s")


def edit(folder, change):
    manifest = json.loads((folder / "manifest.json").read_text())
    change(manifest)
    (folder / "manifest.json").write_text(json.dumps(manifest))


@pytest.mark.parametrize("name", ["..", "../s2", "/etc", "m1/../../x", ".", "", "a\\b", "m1\n"])
def test_a_manifest_that_points_outside_its_folder(stack, name):
    edit(stack.folder, lambda m: m["channels"][0].update(name=name))
    with pytest.raises(FileFormatError):
        read_stack(stack.folder)


@pytest.mark.parametrize("what", ["file", "folder"])
def test_links_out_of_the_stack_are_not_read(stack, tmp_path, what):
    outside = tmp_path / "outside"
    inner = stack.folder / "m2"
    if what == "folder":
        inner.rename(outside)
        inner.symlink_to(outside, target_is_directory=True)
    else:
        outside.write_bytes((inner / "00003.png").read_bytes())
        (inner / "00003.png").unlink()
        (inner / "00003.png").symlink_to(outside)
    with pytest.raises(FileFormatError, match="outside the stack"):
        stack.bits(3)
    assert "unreadable layer" in {f.code for f in preflight(stack.folder)}
    with pytest.raises(ResourceError, match="not a stack") if what == "folder" else nullcontext():
        write_stack(part(), STANDARD, stack.folder, seed=5)
    assert outside.exists()


def bitmap(width, height, raw, depth=1):
    def chunk(kind, data):
        code = struct.pack(">I", zlib.crc32(kind + data))
        return struct.pack(">I", len(data)) + kind + data + code

    head = struct.pack(">IIBBBBB", width, height, depth, 0, 0, 0, 0)
    pitch = struct.pack(">IIB", 23622, 11811, 1)
    chunks = ((b"IHDR", head), (b"pHYs", pitch), (b"IDAT", zlib.compress(raw, 9)), (b"IEND", b""))
    return b"\x89PNG\r\n\x1a\n" + b"".join(chunk(*c) for c in chunks)


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda w, h: bitmap(w + 8, h, bytes(h * ((w + 15) // 8 + 1))), "should be"),
        (lambda w, h: bitmap(w, h, bytes(h * (w + 1)), depth=8), "one-bit"),
        (lambda w, h: bitmap(1 << 20, 1 << 20, bytes(1 << 24)), "should be"),
        (lambda w, h: bitmap(w, h, bytes(1 << 24)), "does not hold"),
        (lambda w, h: bitmap(w, h, b""), "does not hold"),
        (lambda w, h: bytes(1 << 22), "no file of this stack has more"),
    ],
)
def test_a_png_of_wrong_size_or_depth_or_a_bomb_with_a_matching_digest(stack, make, words):
    _, rows, columns = stack.raster.image_shape
    data = make(columns, rows)
    stack.path(0, 2).write_bytes(data)
    code = hashlib.sha256(data).hexdigest()
    edit(stack.folder, lambda m: m["channels"][0]["sha256"].__setitem__(2, code))
    with pytest.raises(FileFormatError, match=words):
        read_stack(stack.folder).bits(2)
    (finding,) = [f for f in preflight(stack.folder) if f.code == "unreadable layer"]
    assert finding.severity == "stop"


def test_a_manifest_that_is_no_manifest(stack):
    path = stack.folder / "manifest.json"
    for text in ("", "[]", "null", "{}", '{"format": "voxelmat-stack"}', "[" * 100_000, "\xff"):
        path.write_bytes(text.encode("latin-1"))
        with pytest.raises(FileFormatError):
            read_stack(stack.folder)
    path.unlink()
    with pytest.raises(FileFormatError, match="not a finished stack"):
        read_stack(stack.folder)


@pytest.mark.parametrize("key", ["x_um", "y_um", "layer_um"])
def test_a_profile_of_zero_pitch(tmp_path, key):
    text = json.loads(json.dumps(STANDARD.as_dict()))
    text["pitch"][key] = 0
    with pytest.raises(InputError, match="above 0") as caught:
        PrintProfile.from_dict(text, file="p.toml")
    assert caught.value.key == f"pitch.{key}"


def test_a_partial_folder_of_another_kind_is_not_taken_over(tmp_path):
    """Pieces of an interrupted TIFF run do not end up in a PNG stack of the same name."""

    class Stop:
        def report(self, stage, *, done, total, **figures):
            if done > 3:
                raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        write_stack(part(), KINDS["tiff"], tmp_path / "s", monitor=Stop(), threads=1, slab=1)
    assert list((tmp_path / "s.partial").rglob("*.page"))
    stack = write_stack(part(), STANDARD, tmp_path / "s")
    assert not list((tmp_path / "s").rglob("*.page"))
    assert not [f for f in preflight(stack) if f.severity == "stop"]
    assert not (tmp_path / "s.partial").exists()
    shutil.rmtree(tmp_path / "s")

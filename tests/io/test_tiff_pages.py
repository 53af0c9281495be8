"""Multi-page one-bit TIFF: read back by Pillow and tifffile; damage and bombs refused."""

import re
import zlib
from fractions import Fraction

import numpy as np
import pytest
import tifffile
from PIL import Image

from voxelmat.errors import FileFormatError, InputError
from voxelmat.io.tiff import PageFormat, TiffPages, decode_page, encode_page, write_pages

# 600 and 300 dpi, exact by the inch of 25.4 mm (check L1: 42.3333 and 84.6667 um).
PITCH = (Fraction(127, 3000), Fraction(127, 1500))


def pages(n=5, rows=37, width=61):
    rng = np.random.default_rng(7)
    pixels = rng.random((n, rows, width)) < 0.3
    pixels[1] = False
    pixels[2] = True
    pixels[3, :, 10:40] = True
    return pixels


def written(path, pixels, form, **options):
    strips = [encode_page(np.packbits(p, axis=1), form) for p in pixels]
    write_pages(path, strips, [len(s) for s in strips], form, **options)
    return strips


def form(pixels, **options):
    _, rows, width = pixels.shape
    return PageFormat(width=width, rows=rows, pitch_mm=PITCH, **options)


@pytest.mark.parametrize("big", [False, True])
@pytest.mark.parametrize(("kind", "low"), [("deflate", False), ("g4", False), ("g4", True)])
def test_pages_come_back(tmp_path, kind, low, big):
    pixels = pages()
    shape = form(pixels, compression=kind, low_first=low)
    strips = written(tmp_path / "a.tif", pixels, shape, big=big)
    found = TiffPages(tmp_path / "a.tif", shape, len(pixels), "a.tif")
    for k in range(len(pixels)):
        assert found.strip(k) == strips[k]
        bits = decode_page(found.strip(k), shape)
        assert (np.unpackbits(bits, axis=1, count=pixels.shape[2]) == pixels[k]).all()


@pytest.mark.parametrize("big", [False, True])
@pytest.mark.parametrize(("kind", "low"), [("deflate", False), ("g4", False), ("g4", True)])
def test_pillow_reads_every_page(tmp_path, kind, low, big):
    pixels = pages()
    written(tmp_path / "a.tif", pixels, form(pixels, compression=kind, low_first=low), big=big)
    with Image.open(tmp_path / "a.tif") as image:
        assert image.n_frames == len(pixels)
        assert image.mode == "1"
        for k in range(len(pixels)):
            image.seek(k)
            assert (np.asarray(image) == pixels[k]).all()
        assert image.info["dpi"] == pytest.approx((600, 300), abs=1e-3)


@pytest.mark.parametrize("big", [False, True])
def test_tifffile_reads_deflated_pages(tmp_path, big):
    pixels = pages()
    written(tmp_path / "a.tif", pixels, form(pixels), big=big)
    with tifffile.TiffFile(tmp_path / "a.tif") as file:
        assert file.is_bigtiff == big
        assert len(file.pages) == len(pixels)
        for k, page in enumerate(file.pages):
            assert (page.asarray().astype(bool) == pixels[k]).all()
            assert page.tags["XResolution"].value == (30000, 127)


def test_a_file_beyond_4_gb_gets_64_bit_offsets(tmp_path, monkeypatch):
    monkeypatch.setattr("voxelmat.io.tiff._BIG_FROM", 2000)
    written(tmp_path / "a.tif", pages(), form(pages()))
    assert (tmp_path / "a.tif").read_bytes()[:4] == b"II\x2b\x00"


def test_same_bytes_every_time():
    pixels = pages()
    for kind in ("deflate", "g4"):
        shape = form(pixels, compression=kind)
        bits = np.packbits(pixels[0], axis=1)
        assert encode_page(bits, shape) == encode_page(bits.copy(), shape)


def test_a_bomb_is_not_inflated(tmp_path):
    shape = PageFormat(width=64, rows=10, pitch_mm=PITCH)
    bomb = zlib.compress(bytes(50_000_000), 9)
    with pytest.raises(FileFormatError, match="80 bytes"):
        decode_page(bomb, shape)
    huge = PageFormat(width=1 << 20, rows=1 << 20, pitch_mm=PITCH)
    write_pages(tmp_path / "b.tif", [bomb], [len(bomb)], huge)
    with pytest.raises(FileFormatError, match="tag 256"):
        TiffPages(tmp_path / "b.tif", shape, 1, "b.tif")


def test_damage_is_refused(tmp_path):
    pixels = pages()
    shape = form(pixels)
    strips = written(tmp_path / "a.tif", pixels, shape)
    whole = (tmp_path / "a.tif").read_bytes()
    path = tmp_path / "c.tif"
    for cut in (0, 3, 7, 100, len(whole) // 2, len(whole) - 3):
        path.write_bytes(whole[:cut])
        with pytest.raises(FileFormatError, match=re.escape("c.tif")):
            TiffPages(path, shape, 5, "c.tif")
    for count, words in ((4, "more than the 4"), (6, "5 pages; the manifest states 6")):
        with pytest.raises(FileFormatError, match=f"{words}|tag 297"):
            TiffPages(tmp_path / "a.tif", shape, count, "a.tif")
    with pytest.raises(FileFormatError):
        decode_page(b"nonsense", form(pixels))
    with pytest.raises(FileFormatError):
        decode_page(strips[0][: len(strips[0]) // 2], shape)
    with pytest.raises(FileFormatError, match="missing"):
        TiffPages(tmp_path / "none.tif", shape, 5, "none.tif")
    rng = np.random.default_rng(3)
    for _ in range(200):  # whatever is changed: an error of ours, or pages of the right shape
        spoilt = bytearray(whole)
        spoilt[rng.integers(len(whole))] = rng.integers(256)
        path.write_bytes(spoilt)
        try:
            found = TiffPages(path, shape, 5, "c.tif")
            for k in range(5):
                assert decode_page(found.strip(k), shape).shape == (37, 8)
        except FileFormatError:
            pass


def test_what_cannot_be_a_page():
    with pytest.raises(InputError):
        PageFormat(width=0, rows=1, pitch_mm=PITCH)
    with pytest.raises(InputError, match="deflated or g4"):
        PageFormat(width=1, rows=1, pitch_mm=PITCH, compression="lzw")
    with pytest.raises(InputError, match="lowest bit"):
        PageFormat(width=1, rows=1, pitch_mm=PITCH, low_first=True)
    with pytest.raises(InputError, match="does not fit"):
        encode_page(np.zeros((2, 2), np.uint8), PageFormat(width=8, rows=2, pitch_mm=PITCH))

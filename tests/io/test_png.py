"""One-bit PNG: read back by independent readers, refused when damaged."""

import io
import struct
import threading
import zlib
from fractions import Fraction

import numpy as np
import png
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from PIL import Image

from voxelmat.errors import FileFormatError, InputError
from voxelmat.io.png import decode_bitmap, encode_bitmap


def pixels(width, height, seed=0):
    return np.random.default_rng(seed).random((height, width)) < 0.4


def encoded(field, ppm=(23622, 11811)):
    return encode_bitmap(np.packbits(field, axis=1), field.shape[1], ppm)


def test_odd_size_reads_back_in_two_other_readers():
    # Check L3: a one-bit PNG of odd width, 61 x 37, by pypng and Pillow, all pixels equal.
    field = pixels(61, 37)
    data = encoded(field)
    width, height, rows, info = png.Reader(bytes=data).read()
    assert (width, height, info["bitdepth"], info["greyscale"]) == (61, 37, 1, True)
    assert np.array_equal(np.array([list(r) for r in rows]), field)
    with Image.open(io.BytesIO(data)) as image:
        assert image.mode == "1"
        assert np.array_equal(np.asarray(image), field)


def test_physical_pitch():
    # Check L1: 25400 / dpi um, and pHYs 23622 / 11811 pixels a metre for 600 / 300 dpi (exact
    # by the inch of 25.4 mm; PNG specification, W3C 2003, 11.3.5.3).
    for dpi, um, ppm in ((300, 84.6667, 11811), (600, 42.3333, 23622), (1200, 21.1667, 47244)):
        pitch = Fraction(25400, dpi)
        assert float(pitch) == pytest.approx(um, abs=1e-4)
        assert round(10**6 / pitch) == ppm
    data = encoded(pixels(9, 3))
    assert png.Reader(bytes=data).read()[3]["physical"] == (23622, 11811, True)
    assert decode_bitmap(data).pixels_per_metre == (23622, 11811)


@settings(deadline=None, max_examples=25)
@given(st.integers(1, 70), st.integers(1, 9), st.integers(0, 99))
def test_round_trip(width, height, seed):
    field = pixels(width, height, seed)
    back = decode_bitmap(encoded(field))
    assert back.width == width
    assert np.array_equal(back.bits, np.packbits(field, axis=1))


def test_same_input_same_bytes():
    assert encoded(pixels(61, 37)) == encoded(pixels(61, 37))


def test_wrong_width_is_refused():
    with pytest.raises(InputError, match="does not fit"):
        encode_bitmap(np.zeros((3, 2), np.uint8), 17, (1, 1))


def chunk(kind, data):
    return struct.pack(">I", len(data)) + kind + data + struct.pack(">I", zlib.crc32(kind + data))


def made_up(width, height, depth, raw, colour=0):
    head = chunk(b"IHDR", struct.pack(">IIBBBBB", width, height, depth, colour, 0, 0, 0))
    body = chunk(b"IDAT", zlib.compress(raw))
    return b"\x89PNG\r\n\x1a\n" + head + body + chunk(b"IEND", b"")


@pytest.mark.parametrize(
    ("data", "words"),
    [
        (b"GIF89a", "not a PNG"),
        (encoded(pixels(61, 37))[:-5], "cut short"),
        (encoded(pixels(61, 37))[:70], "cut short"),
        (made_up(8, 1, 8, b"\0" * 9), "depth 8"),
        (made_up(8, 1, 1, b"\0\0", colour=3), "colour type 3"),
        (made_up(8, 2, 1, b"\0\1\2\1"), "row filters"),
        (made_up(8, 2, 1, b"\0" * 3), "does not hold"),
        (made_up(8, 2, 1, b"\0" * 10_000_000), "does not hold"),
        (made_up(0, 2, 1, b"\0" * 3), "states a size"),
        (made_up(4_000_000_000, 4_000_000_000, 1, b"\0"), "states a size"),
    ],
)
def test_bad_files_are_refused(data, words):
    with pytest.raises(FileFormatError, match=words):
        decode_bitmap(data, "x.png")


def test_every_changed_byte_is_noticed_or_harmless():
    data = encoded(pixels(20, 5))
    want = decode_bitmap(data).bits
    for at in range(len(data)):
        spoilt = data[:at] + bytes([data[at] ^ 0x10]) + data[at + 1 :]
        try:
            assert np.array_equal(decode_bitmap(spoilt).bits, want)
        except FileFormatError:
            continue


def test_threads_and_processes_write_the_same_bytes():
    """The digest of a layer must not depend on who wrote it."""
    rng = np.random.default_rng(1)
    images = []
    for _ in range(60):
        bits = np.zeros((17, 5), dtype=np.uint8)
        low, high = np.sort(rng.integers(0, 17, 2))
        bits[low:high] = 255
        bits[:, rng.integers(0, 5)] ^= np.uint8(rng.integers(0, 256))
        images.append(bits)
    wanted = [encode_bitmap(b, 40, (23622, 11811)) for b in images]
    differ = []

    def again():
        for _ in range(30):
            for bits, data in zip(images, wanted, strict=True):
                if encode_bitmap(bits, 40, (23622, 11811)) != data:
                    differ.append(bits)

    crew = [threading.Thread(target=again) for _ in range(4)]
    for worker in crew:
        worker.start()
    for worker in crew:
        worker.join()
    assert not differ

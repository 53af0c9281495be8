"""Maps from tables and pictures: every cell as written, every fault with its place."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from PIL import Image

from voxelmat.errors import FileFormatError, InputError
from voxelmat.io.tables import read_deflection_map, read_picture, read_pressure_map, read_table


def written(tmp_path, text, name="map.csv", encoding="utf-8"):
    path = tmp_path / name
    path.write_text(text, encoding=encoding, newline="")
    return path


@pytest.mark.parametrize(
    "text",
    [
        "# head\n1.5,2\n\n3,4\n",
        "1.5;2\r\n3;4\r\n",
        "1,5;2\n3;4",
        "1.5\t2\n3\t4\n",
        "1,5\t2\n3\t4\n",
        ' 1.5 , "2"\n 3 ,4 \n',
    ],
    ids=["comma", "semicolon, CRLF", "decimal comma", "tab", "tab, decimal comma", "quotes"],
)
def test_delimiters_and_comments(tmp_path, text):
    assert read_table(written(tmp_path, text)).tolist() == [[1.5, 2.0], [3.0, 4.0]]


def test_byte_order_mark(tmp_path):
    assert read_table(written(tmp_path, "1,2\n", encoding="utf-8-sig")).tolist() == [[1.0, 2.0]]


@settings(deadline=None, max_examples=25)
@given(
    values=hnp.arrays(
        np.float64,
        hnp.array_shapes(min_dims=2, max_dims=2, min_side=2, max_side=5),
        elements=st.floats(0, 1e6, allow_nan=False),
    ),
    mark=st.sampled_from([",", ";", "\t"]),
)
def test_round_trip(tmp_path_factory, values, mark):
    text = "\n".join(mark.join(repr(float(v)) for v in row) for row in values)
    path = written(tmp_path_factory.mktemp("round"), text)
    np.testing.assert_array_equal(read_table(path), values)


def test_units(tmp_path):
    path = written(tmp_path, "10,0\n0,20\n")
    assert read_pressure_map(path, unit="kPa").tolist() == [[0.01, 0.0], [0.0, 0.02]]
    with pytest.raises(InputError, match="needs its unit"):
        read_pressure_map(path)
    with pytest.raises(InputError, match=r"kpa.*Did you mean 'kPa'"):
        read_pressure_map(path, unit="kpa")


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("# a\n1,2\n3,nan\n", r"Row 2, column 2 \(line 3\) holds 'nan'"),
        ("1,inf\n", r"Row 1, column 2 \(line 1\) holds 'inf'"),
        ("x,y\n1,2\n", r"Row 1, column 1 \(line 1\) holds 'x'"),
        ("1,2\n3,\n", r"Row 2, column 2 \(line 2\) holds nothing"),
        ("1,2\n3,1_0\n", r"Row 2, column 2 \(line 2\) holds '1_0'"),
        ("1,2\n3\n", "Line 2 has 1 cells, the first row has 2"),
        ("1.234,5;2\n", r"Row 1, column 1"),
        ("# nothing\n\n", "no numbers"),
        ("", "no numbers"),
        ("1,2\n3,-4\n", "Row 2, column 2 holds a negative pressure, -4 kPa"),
    ],
)
def test_bad_tables(tmp_path, text, said):
    path = written(tmp_path, text)
    with pytest.raises(InputError, match=said) as caught:
        read_pressure_map(path, unit="kPa")
    assert caught.value.file == str(path)


def test_deflections_may_be_negative(tmp_path):
    assert read_deflection_map(written(tmp_path, "-1,2\n")).tolist() == [[-1.0, 2.0]]
    with pytest.raises(InputError, match="table of numbers in mm"):
        read_deflection_map(tmp_path / "map.png")


def test_not_a_text_file(tmp_path):
    path = tmp_path / "map.csv"
    path.write_bytes(b"\xff\xfe1\x00,\x002")
    with pytest.raises(FileFormatError, match="UTF-8"):
        read_table(path)
    with pytest.raises(InputError, match="no such file"):
        read_table(tmp_path / "other.csv")
    with pytest.raises(InputError, match="folder"):
        read_table(tmp_path)


@pytest.mark.parametrize("suffix", ["png", "tif", "bmp"])
def test_eight_bit_picture(tmp_path, suffix):
    path = tmp_path / f"map.{suffix}"
    Image.fromarray(np.array([[0, 255, 51], [102, 0, 0]], dtype=np.uint8)).save(path)
    np.testing.assert_allclose(
        read_pressure_map(path, white_MPa=0.5), [[0, 0.5, 0.1], [0.2, 0, 0]], rtol=1e-14
    )


def test_sixteen_bit_and_one_bit_pictures(tmp_path):
    Image.fromarray(np.array([[0, 65535, 13107]], dtype=np.uint16)).save(tmp_path / "deep.png")
    np.testing.assert_allclose(read_picture(tmp_path / "deep.png"), [[0, 1, 0.2]], rtol=1e-14)
    Image.fromarray(np.array([[False, True]])).save(tmp_path / "bits.png")
    assert read_picture(tmp_path / "bits.png").tolist() == [[0.0, 1.0]]


def test_grey_in_colour_modes(tmp_path):
    grey = np.full((2, 2, 3), 51, dtype=np.uint8)
    Image.fromarray(grey).save(tmp_path / "rgb.png")
    Image.fromarray(grey).convert("P").save(tmp_path / "palette.png")
    for name in ("rgb.png", "palette.png"):
        np.testing.assert_allclose(read_picture(tmp_path / name), 0.2, rtol=1e-14)
    grey[0, 0, 1] = 60
    Image.fromarray(grey).save(tmp_path / "colour.png")
    with pytest.raises(InputError, match="has colours"):
        read_picture(tmp_path / "colour.png")
    clear = np.full((2, 2, 4), 51, dtype=np.uint8)
    Image.fromarray(clear).save(tmp_path / "clear.png")
    with pytest.raises(InputError, match="transparent"):
        read_picture(tmp_path / "clear.png")


@pytest.mark.parametrize("white", [None, 0.0, -1.0, float("nan")])
def test_a_picture_needs_its_range(tmp_path, white):
    Image.new("L", (2, 2)).save(tmp_path / "map.png")
    with pytest.raises(InputError, match="white_MPa"):
        read_pressure_map(tmp_path / "map.png", white_MPa=white)


def test_broken_pictures(tmp_path):
    whole = tmp_path / "whole.png"
    noise = np.random.default_rng(1).integers(0, 256, (64, 64), dtype=np.uint8)
    Image.fromarray(noise).save(whole)
    cut = tmp_path / "cut.png"
    cut.write_bytes(whole.read_bytes()[:200])
    text = tmp_path / "text.png"
    text.write_text("1,2\n")
    for path in (cut, text):
        with pytest.raises(FileFormatError, match="cannot be read as a picture"):
            read_picture(path)

"""Group 4 strips against a slow decoder of our own: the codes of ITU-T T.4 and T.6, run by run.

Libtiff, through Pillow, writes and reads these strips in the program; here nothing of it is used.
"""

from fractions import Fraction
from itertools import pairwise

import numpy as np
import pytest

from voxelmat.io.tiff import PageFormat, encode_page

# Codes of runs of 0 to 63 sites (ITU-T Recommendation T.4, tables 2; from memory). Images here
# are 61 wide, so no longer run and no make-up code occurs.
WHITE_CODES = """
00110101 000111 0111 1000 1011 1100 1110 1111 10011 10100 00111 01000 001000 000011 110100
110101 101010 101011 0100111 0001100 0001000 0010111 0000011 0000100 0101000 0101011 0010011
0100100 0011000 00000010 00000011 00011010 00011011 00010010 00010011 00010100 00010101 00010110
00010111 00101000 00101001 00101010 00101011 00101100 00101101 00000100 00000101 00001010 00001011
01010010 01010011 01010100 01010101 00100100 00100101 01011000 01011001 01011010 01011011 01001010
01001011 00110010 00110011 00110100"""
BLACK_CODES = """
0000110111 010 11 10 011 0011 0010 00011 000101 000100 0000100 0000101 0000111 00000100
00000111 000011000 0000010111 0000011000 0000001000 00001100111 00001101000 00001101100 00000110111
00000101000 00000010111 00000011000 000011001010 000011001011 000011001100 000011001101 000001101000
000001101001 000001101010 000001101011 000011010010 000011010011 000011010100 000011010101
000011010110 000011010111 000001101100 000001101101 000011011010 000011011011 000001010100
000001010101 000001010110 000001010111 000001100100 000001100101 000001010010 000001010011
000000100100 000000110111 000000111000 000000100111 000000101000 000001011000 000001011001
000000101011 000000101100 000001011010 000001100110 000001100111"""
# Modes of T.6 (table 1 there, from memory): vertical by -3 to 3, pass, horizontal.
MODES = {
    "1": 0, "011": 1, "000011": 2, "0000011": 3, "010": -1, "000010": -2, "0000010": -3,
    "0001": "pass", "001": "horizontal",
}  # fmt: skip
WHITE, BLACK = WHITE_CODES.split(), BLACK_CODES.split()
RUNS = [{code: run for run, code in enumerate(codes)} for codes in (WHITE, BLACK)]


class Codes:
    """Reads one code after another."""

    def __init__(self, strip, low_first):
        bits = np.unpackbits(
            np.frombuffer(strip, np.uint8), bitorder="little" if low_first else "big"
        )
        self.text = "".join(map(str, bits))
        self.at = 0

    def next(self, table):
        for length in range(1, 14):
            found = table.get(self.text[self.at : self.at + length])
            if found is not None:
                self.at += length
                return found
        raise AssertionError(f"no code at bit {self.at}: {self.text[self.at : self.at + 16]}")


def change(line, start, colour):
    """First site from `start` on whose colour is not `colour` while the one before has it."""
    for at in range(start, len(line)):
        before = line[at - 1] if at else 0
        if line[at] != colour and before == colour:
            return at
    return len(line)


def decoded(strip, width, rows, low_first=False):
    codes = Codes(strip, low_first)
    above = np.zeros(width, dtype=int)
    image = []
    for _ in range(rows):
        line = np.zeros(width, dtype=int)
        at, colour = -1, 0
        while at < width:
            first = change(above, at + 1, colour)
            mode = codes.next(MODES)
            if mode == "pass":
                second = change(above, first + 1, 1 - colour)
                line[max(at, 0) : second] = colour
                at = second
            elif mode == "horizontal":
                at = max(at, 0)
                for shade in (colour, 1 - colour):
                    run = codes.next(RUNS[shade])
                    line[at : at + run] = shade
                    at += run
            else:
                line[max(at, 0) : first + mode] = colour
                at, colour = first + mode, 1 - colour
        image.append(line)
        above = line
    end = codes.text[codes.at :]
    assert end.startswith("000000000001" * 2)  # end of the block, then filling to a byte
    assert len(end) < 24 + 8
    return np.array(image)


@pytest.mark.parametrize("low_first", [False, True])
@pytest.mark.parametrize("share", [0.0, 0.02, 0.3, 0.5, 0.97, 1.0])
def test_our_own_decoder_reads_the_strips(share, low_first):
    rows, width = 37, 61
    rng = np.random.default_rng(int(100 * share))
    pixels = (rng.random((rows, width)) < share).astype(int)
    pixels[5:20, 10:50] |= rng.random((15, 40)) < 0.5 * share
    form = PageFormat(
        width=width,
        rows=rows,
        pitch_mm=(Fraction(127, 3000), Fraction(127, 1500)),
        compression="g4",
        low_first=low_first,
    )
    strip = encode_page(np.packbits(pixels.astype(np.uint8), axis=1), form)
    assert (decoded(strip, width, rows, low_first) == pixels).all()


def test_the_codes_tell_themselves_apart():
    for table in (*RUNS, MODES):
        codes = sorted(table)
        assert not any(b.startswith(a) for a, b in pairwise(codes))
    assert len(WHITE) == len(BLACK) == 64

"""Sites of a printed layer: counter-based noise, one resin dealt over several channels, packing.

A site is one byte: 0 where nothing is laid, else the number of its channel, from 1.
"""

import numpy as np
from numba import njit


@njit(cache=True, nogil=True, inline="always")
def _mixed(value):
    """A 64-bit word made of another, every bit of which depends on every bit of it."""
    # The finaliser of splitmix64 (Steele, Lea & Flood 2014, OOPSLA, 453-472).
    value = (value ^ (value >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
    value = (value ^ (value >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    return value ^ (value >> np.uint64(31))


@njit(cache=True, nogil=True, inline="always")
def _site_word(layer, row, column, key):
    """The random word of a site: its coordinates (each below 2^21) are the counter."""
    counter = np.uint64(layer) << np.uint64(42) | np.uint64(row) << np.uint64(21)
    return _mixed((counter | np.uint64(column)) * np.uint64(0x9E3779B97F4A7C15) + key)


@njit(cache=True, nogil=True, inline="always")
def _unit(word):
    """A word as a number in (0, 1); 23 bits, so that it is exact."""
    return (np.float32(word >> np.uint64(41)) + np.float32(0.5)) * np.float32(2.0**-23)


@njit(cache=True, nogil=True)
def hash_row(layer, row, column, key, out):
    """White-noise thresholds in (0, 1) of one printer row, f32 [n], by global coordinates."""
    for x in range(out.shape[0]):
        out[x] = _unit(_site_word(layer, row, column + x, key))


@njit(cache=True, nogil=True)
def deal_sites(sites, start, count, table):
    """Deal the droplets of each number over the channels of its resin, in place.

    sites u8 [rows, columns], start i64 [3] layer, row and column of the first site on the tray,
    count u8 [256] channels of each number, table u8 [256, most] the channels.
    Blocks of 2 x 2 x 2 sites take the channels in turn along x, y and z: single sites fall in step
    with the checkerboard that an even halftone nearly is, and share up to twice as unevenly.
    """
    for y in range(sites.shape[0]):
        phase = (start[0] >> 1) + ((start[1] + y) >> 1)
        for x in range(sites.shape[1]):
            number = sites[y, x]
            n = count[number]
            turn = (phase + ((start[2] + x) >> 1)) % n if n > 1 else 0
            sites[y, x] = table[number, turn]


@njit(cache=True, nogil=True)
def lay_over(own, out):
    """Lay the sites of a part over those that are there, u8 [rows, columns]; tell if any clash."""
    clash = np.uint8(0)
    for y in range(own.shape[0]):
        for x in range(own.shape[1]):
            a, b = own[y, x], out[y, x]
            clash |= np.uint8(1) if (a > 0) & (b > 0) else np.uint8(0)
            out[y, x] = a if a > 0 else b
    return clash > 0


@njit(cache=True, nogil=True)
def pack_sites(sites, first, bits):
    """Pack channels ``first``, ``first + 1``, ... of a layer, eight sites to a byte.

    sites u8 [rows, 8 * stride], bits u8 [channels, rows, stride] (out), the first site of a row
    in the highest bit; channel c holds the sites of number c + 1, which may go up to 255.
    """
    ones = np.uint64(0x0101010101010101)
    low7 = np.uint64(0x7F7F7F7F7F7F7F7F)
    words = sites.view(np.uint64)
    for y in range(words.shape[0]):
        seen = np.uint64(0)
        for b in range(words.shape[1]):
            seen |= words[y, b]
        if seen == 0:
            bits[:, y, :] = 0
            continue
        for c in range(bits.shape[0]):
            wanted = np.uint64(first + c + 1) * ones
            for b in range(words.shape[1]):
                v = words[y, b] ^ wanted  # a byte is 0 where the site belongs to this channel
                v = ~(((v & low7) + low7) | v)  # its highest bit is 1 there; no byte overflows
                v = v >> np.uint64(7) & ones
                v |= v << np.uint64(9)  # gather the eight low bits in the highest byte, reversed
                v |= v << np.uint64(18)
                v |= v << np.uint64(36)
                bits[c, y, b] = np.uint8(v >> np.uint64(56))

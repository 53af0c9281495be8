"""Characters of 5 x 7 cells for marks on parts, drawn for this purpose, and text made of them."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError

__all__ = ["CHARACTERS", "GLYPH_SIZE", "text_cells"]

#: Cells across and up.
GLYPH_SIZE = (5, 7)

# Rows from the top, one number a row, bit 4 the leftmost cell.
_ROWS: dict[str, tuple[int, ...]] = {
    " ": (0, 0, 0, 0, 0, 0, 0),
    "0": (14, 17, 19, 21, 25, 17, 14),
    "1": (4, 12, 4, 4, 4, 4, 14),
    "2": (14, 17, 1, 6, 8, 16, 31),
    "3": (31, 2, 4, 2, 1, 17, 14),
    "4": (2, 6, 10, 18, 31, 2, 2),
    "5": (31, 16, 30, 1, 1, 17, 14),
    "6": (6, 8, 16, 30, 17, 17, 14),
    "7": (31, 1, 2, 4, 4, 4, 4),
    "8": (14, 17, 17, 14, 17, 17, 14),
    "9": (14, 17, 17, 15, 1, 2, 12),
    "A": (14, 17, 17, 31, 17, 17, 17),
    "B": (30, 17, 17, 30, 17, 17, 30),
    "C": (14, 17, 16, 16, 16, 17, 14),
    "D": (28, 18, 17, 17, 17, 18, 28),
    "E": (31, 16, 16, 30, 16, 16, 31),
    "F": (31, 16, 16, 30, 16, 16, 16),
    "G": (14, 17, 16, 23, 17, 17, 15),
    "H": (17, 17, 17, 31, 17, 17, 17),
    "I": (14, 4, 4, 4, 4, 4, 14),
    "J": (7, 2, 2, 2, 2, 18, 12),
    "K": (17, 18, 20, 24, 20, 18, 17),
    "L": (16, 16, 16, 16, 16, 16, 31),
    "M": (17, 27, 21, 21, 17, 17, 17),
    "N": (17, 25, 21, 19, 17, 17, 17),
    "O": (14, 17, 17, 17, 17, 17, 14),
    "P": (30, 17, 17, 30, 16, 16, 16),
    "Q": (14, 17, 17, 17, 21, 18, 13),
    "R": (30, 17, 17, 30, 20, 18, 17),
    "S": (15, 16, 16, 14, 1, 1, 30),
    "T": (31, 4, 4, 4, 4, 4, 4),
    "U": (17, 17, 17, 17, 17, 17, 14),
    "V": (17, 17, 17, 17, 17, 10, 4),
    "W": (17, 17, 17, 21, 21, 27, 17),
    "X": (17, 17, 10, 4, 10, 17, 17),
    "Y": (17, 17, 10, 4, 4, 4, 4),
    "Z": (31, 1, 2, 4, 8, 16, 31),
    "-": (0, 0, 0, 31, 0, 0, 0),
    ".": (0, 0, 0, 0, 0, 12, 12),
    "/": (1, 1, 2, 4, 8, 16, 16),
    ">": (0, 4, 2, 31, 2, 4, 0),  # arrows along the text, against it, and up
    "<": (0, 4, 8, 31, 8, 4, 0),
    "^": (4, 14, 21, 4, 4, 4, 4),
}

#: All characters that a mark can hold.
CHARACTERS = "".join(_ROWS)


def _glyph(character: str) -> NDArray[np.bool_]:
    rows = np.array(_ROWS[character])[:, None]
    return np.asarray(rows >> np.arange(GLYPH_SIZE[0] - 1, -1, -1) & 1, dtype=np.bool_)


def text_cells(lines: tuple[str, ...], *, key: str = "mark") -> NDArray[np.bool_]:
    """Lines of text as cells, with a border of one empty cell.

    Parameters
    ----------
    lines : tuple of str
        Small letters are written as capitals.
    key : str
        Named in errors.

    Returns
    -------
    ndarray of bool, shape (columns, rows)
        Indexed ``[c, r]``: c along the text, r *upwards*.

    Raises
    ------
    InputError
        For a character that there is no glyph of, or for no text at all.
    """
    lines = tuple(line.upper() for line in lines)
    unknown = sorted({c for line in lines for c in line if c not in _ROWS})
    if unknown or not any(line.strip() for line in lines):
        raise InputError(
            f"A mark is written with {CHARACTERS.strip()}; got {' '.join(unknown) or 'nothing'}.",
            key=key,
        )
    across, up = GLYPH_SIZE
    width = max(len(line) for line in lines) * (across + 1) + 1
    cells = np.zeros((len(lines) * (up + 1) + 1, width), dtype=np.bool_)
    for n, line in enumerate(lines):
        for m, character in enumerate(line):
            row, column = n * (up + 1) + 1, m * (across + 1) + 1
            cells[row : row + up, column : column + across] = _glyph(character)
    return np.ascontiguousarray(cells[::-1].T)

"""Reads maps laid on a part: tables of numbers from CSV, or brightness from a greyscale picture."""

from __future__ import annotations

import math
from pathlib import Path
from typing import NoReturn

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import FileFormatError, InputError, ResourceError
from voxelmat.units import pressure_factor

__all__ = ["PICTURES", "read_deflection_map", "read_picture", "read_pressure_map", "read_table"]

Floats = NDArray[np.float64]

#: Endings of files that are read as pictures; everything else is read as a table.
PICTURES = (".png", ".tif", ".tiff", ".bmp", ".jpg", ".jpeg")

_LARGEST_BYTES = 64 * 2**20
_LARGEST_CELLS = 2**24


def read_pressure_map(
    path: str | Path, *, unit: str | None = None, white_MPa: float | None = None
) -> Floats:
    """Pressures in MPa, shape (rows, columns), row 0 first as in the file.

    Parameters
    ----------
    path : path
        A table, or a picture (see `PICTURES`) whose brightness is pressure.
    unit : str, optional
        Unit of a table's values; needed for a table.
    white_MPa : float, optional
        What full white stands for, black being 0; needed for a picture.

    Raises
    ------
    InputError
        If a cell is text, empty, not finite or negative (row, column and line are named), if rows
        differ in length, or if what the kind of file needs is missing.
    FileFormatError, ResourceError
        If the file is not what it claims to be, or cannot be read.
    """
    file = Path(path)
    if file.suffix.lower() in PICTURES:
        if white_MPa is None or not (math.isfinite(white_MPa) and white_MPa > 0):
            raise InputError(
                f"A picture needs white_MPa, the pressure of full white, above 0; got {white_MPa}.",
                file=str(file),
            )
        return read_picture(file) * white_MPa
    if unit is None:
        raise InputError("A table of pressures needs its unit, such as kPa.", file=str(file))
    factor = pressure_factor(unit)
    values = read_table(file)
    low = np.argwhere(values < 0)
    if len(low):
        row, column = low[0] + 1
        value = values[row - 1, column - 1]
        raise InputError(
            f"Row {row}, column {column} holds a negative pressure, {value:g} {unit}; contact "
            "cannot pull. Use 0 where nothing touches.",
            file=str(file),
        )
    return values * factor


def read_deflection_map(path: str | Path) -> Floats:
    """Deflections in mm, shape (rows, columns); errors as `read_table`."""
    file = Path(path)
    if file.suffix.lower() in PICTURES:
        raise InputError("A deflection map is a table of numbers in mm.", file=str(file))
    return read_table(file)


def _bytes(file: Path) -> bytes:
    try:
        size = file.stat().st_size
        if size > _LARGEST_BYTES:
            raise FileFormatError(f"{file} has {size:,} bytes; a map has at most 64 MiB.")
        return file.read_bytes()
    except FileNotFoundError:
        raise InputError("There is no such file; check the path.", file=str(file)) from None
    except IsADirectoryError:
        raise InputError("This is a folder; give a table or a picture.", file=str(file)) from None
    except OSError as error:
        raise ResourceError(f"{file} cannot be read: {error.strerror}.") from None


def read_table(path: str | Path) -> Floats:
    """A table of numbers, shape (rows, columns).

    Cells are separated by ``;``, by a tab, or by ``,``. With ``;`` or a tab a comma may be the
    decimal mark. Lines that start with ``#`` and empty lines do not count.

    Raises
    ------
    InputError
        If a cell is no finite number (row, column and line are named), or rows differ in length.
    FileFormatError, ResourceError
    """
    file = Path(path)
    try:
        text = _bytes(file).decode("utf-8-sig")
    except UnicodeDecodeError as error:
        raise FileFormatError(
            f"{file} is not a text table in UTF-8 (byte {error.start}); export it as CSV."
        ) from None
    lines = [(n, line.strip(" \r")) for n, line in enumerate(text.split("\n"), 1)]
    kept = [(n, line) for n, line in lines if line.strip() and not line.startswith("#")]
    if not kept:
        raise InputError("The table holds no numbers.", file=str(file))
    mark = next((m for m in (";", "\t") if any(m in line for _, line in kept)), ",")
    rows = [_row(line, mark, r, n, file) for r, (n, line) in enumerate(kept, 1)]
    width = len(rows[0])
    for (n, _), row in zip(kept, rows, strict=True):
        if len(row) != width:
            raise InputError(
                f"Line {n} has {len(row)} cells, the first row has {width}; every row of a map "
                "has the same number.",
                file=str(file),
            )
    return np.array(rows, dtype=np.float64)


def _row(line: str, mark: str, row: int, number: int, file: Path) -> list[float]:
    found = []
    for column, cell in enumerate(line.split(mark), 1):
        word = cell.strip().strip('"')
        if mark != "," and "." not in word:
            word = word.replace(",", ".")
        try:
            # float() takes underscores between digits; a table that has them is not meant so.
            value = float(word) if "_" not in word else math.nan
        except ValueError:
            _refuse(cell, row, column, number, file)
        if not math.isfinite(value):
            _refuse(cell, row, column, number, file)
        found.append(value)
    return found


def _refuse(cell: str, row: int, column: int, number: int, file: Path) -> NoReturn:
    what = f"'{cell.strip()[:40]}'" if cell.strip() else "nothing"
    raise InputError(
        f"Row {row}, column {column} (line {number}) holds {what}, which is not a finite number. "
        "Start lines of text with #, and write 0 where there is nothing.",
        file=str(file),
    )


def read_picture(path: str | Path) -> Floats:
    """Brightness of a greyscale picture, 0 (black) to 1 (white), the top row first.

    Raises
    ------
    InputError
        If the picture has colours or is partly transparent.
    FileFormatError
        If it is not a picture, is cut short, or is unreasonably large.
    """
    import io

    from PIL import Image, UnidentifiedImageError

    file = Path(path)
    raw = _bytes(file)
    try:
        with Image.open(io.BytesIO(raw)) as picture:
            if picture.width * picture.height > _LARGEST_CELLS:
                raise FileFormatError(
                    f"{file} has {picture.width} x {picture.height} pixels; make it smaller, a map "
                    "takes at most 2^24."
                )
            plain = picture.convert("RGBA") if picture.mode == "P" else picture
            mode = plain.mode
            pixels = np.asarray(plain)
    except (UnidentifiedImageError, OSError, SyntaxError, ValueError) as error:
        if isinstance(error, FileFormatError):
            raise
        raise FileFormatError(f"{file} cannot be read as a picture: {error}.") from None
    return _brightness(pixels, mode, file)


def _brightness(pixels: NDArray[np.generic], mode: str, file: Path) -> Floats:
    """From the pixels of a mode of Pillow to 0..1."""
    if mode == "1":
        return pixels.astype(np.float64)
    if mode in ("I;16", "I;16B", "I;16L", "I"):
        values = pixels.astype(np.float64)
        if values.size and not (values.min() >= 0 and values.max() <= 65535):
            raise InputError("Only pictures of 1, 8 or 16 bits are read.", file=str(file))
        return values / 65535.0
    if mode not in ("L", "LA", "RGB", "RGBA"):
        raise InputError(
            f"The picture has mode {mode}; save it as greyscale of 8 or 16 bits.", file=str(file)
        )
    if mode in ("LA", "RGBA"):
        if (pixels[..., -1] != 255).any():
            raise InputError("The picture is partly transparent; flatten it.", file=str(file))
        pixels = pixels[..., :-1]
    if pixels.ndim == 3:
        if (pixels != pixels[..., :1]).any():
            raise InputError(
                "The picture has colours; brightness alone is pressure. Save it as greyscale.",
                file=str(file),
            )
        pixels = pixels[..., 0]
    return pixels.astype(np.float64) / 255.0

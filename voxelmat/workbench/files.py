"""Files that are dropped on the screen: put beside the design under a safe name, nothing lost."""

from __future__ import annotations

import re
from pathlib import Path

from voxelmat.errors import InputError
from voxelmat.io.atomic import write_bytes

__all__ = ["bring_in"]


def bring_in(folder: Path, name: str, data: bytes, endings: tuple[str, ...]) -> Path:
    """Write a dropped file into the design's folder.

    Parameters
    ----------
    folder : Path
    name : str
        As the browser gives it.
    data : bytes
    endings : tuple of str
        Lower-case suffixes that are wanted: ``(".stl", ".obj")``.

    Returns
    -------
    Path
        A new file, or one that is there already with the same content; a file of that name with
        other content stays as it is, and the new one gets a number.

    Raises
    ------
    InputError
        For another kind of file, or an empty one.
    ResourceError
        If the folder refuses.
    """
    plain = re.sub(r"[^A-Za-z0-9._-]+", "-", name.replace("\\", "/").rsplit("/", 1)[-1]).lstrip(".")
    path = folder / (plain or "file")
    if path.suffix.lower() not in endings:
        raise InputError(f"'{name}' is not one of {', '.join(endings)}; choose such a file.")
    if not data:
        raise InputError(f"'{name}' is empty; export it again.")
    for n in range(1, 10_000):
        target = path if n == 1 else path.with_name(f"{path.stem}-{n}{path.suffix}")
        if not target.exists():
            write_bytes(target, data)
            return target
        if target.read_bytes() == data:
            return target
    raise InputError(f"There are too many files called '{plain}' in the folder; remove some.")

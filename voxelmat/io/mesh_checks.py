"""What can be told about a mesh file before it is parsed: its kind, and whether it is whole."""

from __future__ import annotations

import re
from pathlib import Path

from voxelmat.errors import FileFormatError, InputError

__all__ = ["KINDS", "check_file"]

#: Endings that are read.
KINDS = ("stl", "obj", "ply", "3mf")

_HEADER = 84  # bytes before the first triangle of a binary STL
_RECORD = 50  # bytes of one triangle


def check_file(file: Path) -> str:
    """Return the kind of a mesh file ("stl", "obj", "ply" or "3mf") once it looks whole.

    Raises
    ------
    InputError
        If there is no such file or its ending is not one that is read.
    FileFormatError
        If it is empty, cut short, or is not what its ending says.
    """
    kind = file.suffix.lower().lstrip(".")
    if kind not in KINDS:
        raise InputError(
            f"The ending '{file.suffix}' is not read; export the mesh as "
            f"{', '.join(k.upper() for k in KINDS)}.",
            file=file.name,
        )
    if not file.is_file():
        raise InputError("There is no such file. Check the path.", file=file.name)
    size = file.stat().st_size
    if size == 0:
        raise FileFormatError(f"{file.name} is empty (0 bytes). Export the mesh again.")
    with file.open("rb") as handle:
        head = handle.read(1024)
    if kind == "3mf":
        if not head.startswith(b"PK"):
            raise FileFormatError(
                f"{file.name} is not a 3MF package (it does not begin like a ZIP file). Export "
                "it again, or give the file the ending of what it is."
            )
    elif head.startswith(b"PK\x03\x04"):
        raise FileFormatError(
            f"{file.name} is a ZIP file, not {kind.upper()}. Unpack it, or name it .3mf if it is "
            "a 3MF package."
        )
    if kind == "stl":
        _check_stl(file, head, size)
    elif kind == "ply" and not re.match(rb"ply\r?\n|ply\r", head):
        raise FileFormatError(f"{file.name} does not begin with 'ply', so it is not PLY.")
    elif kind == "obj" and b"\0" in head:
        raise FileFormatError(
            f"{file.name} holds binary data, but OBJ is text. Give the file the ending of what "
            "it is, or export it again."
        )
    return kind


def _check_stl(file: Path, head: bytes, size: int) -> None:
    """Tell binary from ASCII by the count in the header, never by the word 'solid' alone."""
    count = int.from_bytes(head[80:84], "little") if len(head) >= _HEADER else 0
    if size >= _HEADER and size == _HEADER + _RECORD * count:
        return
    if head.lstrip()[:5].lower() == b"solid" and b"\0" not in head:
        _check_ascii_stl(file)
        return
    if size < _HEADER:
        raise FileFormatError(
            f"{file.name} is {size} bytes long, less than the {_HEADER}-byte head of a binary "
            "STL. The file is cut short; export or copy it again."
        )
    need = _HEADER + _RECORD * count
    what = "is cut short" if size < need else "is longer than that"
    raise FileFormatError(
        f"{file.name} says it holds {count} triangles, which take {need} bytes, but it has {size}: "
        f"it {what}, or is not STL. Export or copy it again."
    )


def _check_ascii_stl(file: Path) -> None:
    text = file.read_bytes().lower()
    begun = len(re.findall(rb"^\s*facet\b", text, re.MULTILINE))
    ended = len(re.findall(rb"^\s*endfacet\b", text, re.MULTILINE))
    corners = len(re.findall(rb"^\s*vertex\s", text, re.MULTILINE))
    solids = len(re.findall(rb"^\s*solid\b", text, re.MULTILINE))
    closed = len(re.findall(rb"^\s*endsolid\b", text, re.MULTILINE))
    if begun != ended or corners != 3 * ended or solids != closed:
        raise FileFormatError(
            f"{file.name} is cut short or damaged: it begins {begun} facets, ends {ended}, has "
            f"{corners} corners, and closes {closed} of {solids} solids. Export or copy it again."
        )

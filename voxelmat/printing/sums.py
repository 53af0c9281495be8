"""Check sums beside a stack, and a script that checks them on the printer's computer."""

from __future__ import annotations

import os
from collections.abc import Mapping
from importlib.resources import files
from pathlib import Path

from voxelmat.provenance import file_digest

__all__ = ["CHECKER", "OWN_FILES", "SUMS", "add_sums"]

#: As ``sha256sum -c`` takes it: a digest, two spaces, a path inside the folder, line by line.
SUMS = "SHA256SUMS"
#: Needs nothing but Python's standard library.
CHECKER = "check_stack.py"
OWN_FILES = (SUMS, CHECKER)


def add_sums(folder: Path, known: Mapping[str, str] | None = None) -> None:
    """Put `SUMS` and `CHECKER` into the folder of a stack whose other files are all written.

    The check sums cover all other files; the script is not among them, for whoever could change
    a layer could change the script too. Files are listed in alphabetical order.

    Parameters
    ----------
    folder : Path
        Not yet published.
    known : mapping, optional
        Path inside the folder to SHA-256, for files that need not be read again.

    Raises
    ------
    OSError
        If a file cannot be read or written.
    """
    given = known or {}
    script = (files("voxelmat.printing") / CHECKER).read_bytes()
    paths = sorted(p.relative_to(folder).as_posix() for p in folder.rglob("*") if p.is_file())
    listed = [p for p in paths if p not in OWN_FILES and not p.startswith("journal.jsonl")]
    lines = [f"{given.get(p) or file_digest(folder / p)}  {p}\n" for p in listed]
    (folder / CHECKER).write_bytes(script)
    with (folder / SUMS).open("w", encoding="utf-8", newline="\n") as handle:
        handle.writelines(lines)
        handle.flush()
        os.fsync(handle.fileno())

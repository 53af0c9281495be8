"""Check a stack of images beside this script: every file, their number, their size.

Needs nothing but Python 3.8 or later. Put it in the folder of the stack and run

    python check_stack.py

or give the folder: ``python check_stack.py FOLDER``. Exit code 0: the stack is whole. 1: it is
not; do not print. 2: it could not be checked.
"""

from __future__ import annotations

import argparse
import hashlib
import json
import re
import struct
import sys
from pathlib import Path, PurePosixPath
from typing import Any

SUMS = "SHA256SUMS"
MANIFEST = "manifest.json"
NAMED = 20  # faults that are listed; the rest is counted
BLOCK = 1 << 20
OWN = (SUMS, "check_stack.py", "__pycache__")
LINE = re.compile(r"^([0-9a-f]{64}) [ *](.+)$")


class Unusable(Exception):
    """The stack cannot be checked."""


def read_sums(folder: Path) -> dict[str, str]:
    """Path inside the folder to its SHA-256."""
    found = {}
    try:
        lines = (folder / SUMS).read_text(encoding="utf-8").splitlines()
    except (OSError, UnicodeDecodeError) as error:
        raise Unusable(f"{SUMS} cannot be read: {error}") from None
    for number, line in enumerate(lines, 1):
        match = LINE.match(line)
        if match is None:
            raise Unusable(f"line {number} of {SUMS} is not 'SHA-256  path': {line[:80]!r}")
        path = match.group(2)
        steps = path.split("/")
        if (
            PurePosixPath(path).is_absolute()
            or "\\" in path
            or ":" in path
            or ".." in steps
            or "" in steps
        ):
            raise Unusable(f"line {number} of {SUMS} names a file outside the stack: {path}")
        if path in found:
            raise Unusable(f"{SUMS} lists {path} twice")
        found[path] = match.group(1)
    if not found:
        raise Unusable(f"{SUMS} lists nothing")
    return found


def digest(path: Path) -> str:
    """SHA-256 of a file."""
    code = hashlib.sha256()
    with path.open("rb") as handle:
        for block in iter(lambda: handle.read(BLOCK), b""):
            code.update(block)
    return code.hexdigest()


def image_size(path: Path) -> tuple[int, int] | None:
    """Width and height of a PNG, or of the first page of a TIFF; None where it is neither."""
    with path.open("rb") as handle:
        head = handle.read(24)
        if head[:8] == b"\x89PNG\r\n\x1a\n" and len(head) == 24:
            width, height = struct.unpack(">II", head[16:24])
            return width, height
        order = {b"II": "<", b"MM": ">"}.get(head[:2])
        if order is None or len(head) < 16:
            return None
        if head[2:4] == struct.pack(order + "H", 43):  # BigTIFF: 64-bit offsets
            count, entry, value, start = "Q", 20, 12, struct.unpack(order + "Q", head[8:16])[0]
        else:
            count, entry, value, start = "H", 12, 8, struct.unpack(order + "I", head[4:8])[0]
        handle.seek(start)
        size = struct.calcsize(order + count)
        entries = struct.unpack(order + count, handle.read(size))[0]
        table = handle.read(entry * min(entries, 1000))
    found = {}
    for at in range(0, len(table) - entry + 1, entry):
        tag, kind = struct.unpack(order + "HH", table[at : at + 4])
        if tag in (256, 257) and kind in (3, 4):
            code = order + ("H" if kind == 3 else "I")
            length = struct.calcsize(code)
            found[tag] = struct.unpack(code, table[at + value : at + value + length])[0]
    return (found[256], found[257]) if len(found) == 2 else None


def expected(manifest: dict[str, Any]) -> tuple[int, tuple[int, int]]:
    """How many image files there should be, and their width and height in pixels."""
    image = manifest["image"]
    size = (int(image["width"]), int(image["height"]))
    layers, channels = int(image["layers"]), len(manifest["channels"])
    kind = image.get("kind", "png bitmap")
    counts = {"png bitmap": layers * channels, "png index": layers, "tiff pages": channels}
    if kind not in counts:
        raise Unusable(f"{MANIFEST} states images of a kind not known here: {kind!r}")
    return counts[kind], size


def extra_files(folder: Path, known: set[str]) -> list[str]:
    """Files that nobody listed."""
    files = (p for p in folder.rglob("*") if not p.is_dir())
    paths = (p.relative_to(folder).as_posix() for p in files)
    return sorted(p for p in paths if p not in known and p.split("/")[0] not in OWN)


def is_image(path: str) -> bool:
    """True for what the printer takes as layers."""
    return path.endswith((".png", ".tif", ".tiff"))


def fault_of(folder: Path, path: str, wanted: str, size: tuple[int, int]) -> str:
    """What is wrong with one file; empty where nothing is."""
    where = folder / path
    if folder.resolve() not in where.resolve().parents:
        return f"{path} is a link that leads out of the stack"
    if not where.is_file():
        return f"{path} is missing"
    try:
        if digest(where) != wanted:
            return f"{path} is not the file that was written ({where.stat().st_size} bytes)"
        if is_image(path):
            found = image_size(where)
            if found != size:
                shown = "of unknown" if found is None else f"{found[0]} x {found[1]}"
                return f"{path} is {shown} pixels; it should be {size[0]} x {size[1]}"
    except (OSError, struct.error) as error:
        return f"{path} cannot be read: {error}"
    return ""


def check(folder: Path, progress: bool = False) -> tuple[list[str], str]:
    """All faults of a stack, and a sentence on what was checked."""
    sums = read_sums(folder)
    if MANIFEST not in sums:
        raise Unusable(f"{SUMS} does not list {MANIFEST}")
    try:
        count, size = expected(json.loads((folder / MANIFEST).read_text(encoding="utf-8")))
    except (OSError, ValueError, KeyError, TypeError, AttributeError) as error:
        return [f"{MANIFEST} is missing or damaged: {error!r}"], ""
    faults = []
    images = [path for path in sums if is_image(path)]
    if len(images) != count:
        faults.append(f"{SUMS} lists {len(images)} images; {MANIFEST} says {count}")
    for done, (path, wanted) in enumerate(sums.items(), 1):
        fault = fault_of(folder, path, wanted, size)
        if fault:
            faults.append(fault)
        if progress and (done % 500 == 0 or done == len(sums)):
            sys.stderr.write(f"\r{done} of {len(sums)} files")
            sys.stderr.flush()
    if progress:
        sys.stderr.write("\n")
    extra = extra_files(folder, set(sums))
    faults += [f"{path} does not belong to the stack; remove it" for path in extra]
    said = f"{len(sums)} files, among them {count} images of {size[0]} x {size[1]} pixels"
    return faults, said


def main(arguments: list[str] | None = None) -> int:
    """Check and say."""
    parser = argparse.ArgumentParser(description="Check a stack of images before printing.")
    here = Path(__file__).resolve().parent
    parser.add_argument(
        "folder", nargs="?", type=Path, default=here, help="default: that of this script"
    )
    parser.add_argument("--quiet", action="store_true", help="no progress")
    options = parser.parse_args(arguments)
    try:
        faults, said = check(options.folder, progress=not options.quiet and sys.stderr.isatty())
    except Unusable as problem:
        sys.stdout.write(f"CANNOT BE CHECKED: {problem}.\n")
        return 2
    for fault in faults[:NAMED]:
        sys.stdout.write(f"  {fault}\n")
    if faults:
        sys.stdout.write(f"DO NOT PRINT: {len(faults)} faults. Copy the stack again.\n")
        return 1
    sys.stdout.write(f"The stack is whole: {said}.\n")
    return 0


if __name__ == "__main__":
    sys.exit(main())

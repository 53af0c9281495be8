"""A 3MF package looked over before anything in it is unpacked for good."""

from __future__ import annotations

import re
import zipfile
import zlib
from dataclasses import dataclass
from pathlib import Path

from voxelmat.errors import FileFormatError

__all__ = ["Package", "check_package"]

#: Limits of what is opened; each message states the one that was passed.
MAX_BYTES = 1 << 30
MAX_RATIO = 200
MAX_MEMBERS = 10_000
MAX_PLACED = 10_000
_SMALL = 1 << 20  # below this size a high ratio is harmless

# 3MF Core Specification, model attribute "unit"; millimeter is its default.
_UNITS = {
    b"micron": "um",
    b"millimeter": "mm",
    b"centimeter": "cm",
    b"inch": "inch",
    b"foot": "foot",
    b"meter": "m",
}
_TAG = re.compile(rb"<(?:[\w.-]+:)?(object|component|item)\b((?:[^>\"']|\"[^\"]*\"|'[^']*')*)>")
_ATTRIBUTE = re.compile(rb"([\w:.-]+)\s*=\s*(?:\"([^\"]*)\"|'([^']*)')")


@dataclass(frozen=True, slots=True, kw_only=True)
class Package:
    """What a 3MF package says about itself: its unit of length, and what is odd in it."""

    unit: str
    cautions: tuple[str, ...] = ()


def check_package(file: Path) -> Package:
    """Refuse unsafe or unreadable packages; return the stated unit.

    Raises
    ------
    FileFormatError
        If the package is damaged, encrypted, would unpack to too much, names members
        outside itself, has no model, needs an extension that is not read, or places its
        objects in a circle or too many times.
    """
    try:
        with zipfile.ZipFile(file) as archive:
            _check_members(file, archive.infolist())
            root = _root_model(file, archive)
            # Reading stops at the size that was checked; more data fails the checksum.
            model = archive.read(root)
    except (zipfile.BadZipFile, zlib.error, EOFError, NotImplementedError, OSError) as error:
        raise FileFormatError(
            f"{file.name} is a damaged or cut 3MF package ({error}). Export or copy it again."
        ) from error
    if model[:2] in (b"\xff\xfe", b"\xfe\xff") or b"\0" in model[:64]:
        raise FileFormatError(
            f"{file.name}: the model is not UTF-8 text. Export it again as UTF-8."
        )
    if re.search(rb"<!(DOCTYPE|ENTITY)", model):
        raise FileFormatError(
            f"{file.name}: the model defines XML entities, which the 3MF standard forbids. Export "
            "it again from a program that writes plain 3MF."
        )
    unit = _root_unit(file, model)
    return Package(unit=unit, cautions=_check_placing(file, model))


def _check_members(file: Path, members: list[zipfile.ZipInfo]) -> None:
    name = file.name
    if len(members) > MAX_MEMBERS:
        raise FileFormatError(f"{name} holds {len(members)} files; the limit is {MAX_MEMBERS}.")
    total = sum(m.file_size for m in members)
    if total > MAX_BYTES:
        raise FileFormatError(
            f"{name} would unpack to {total / 1e6:.0f} MB; the limit is {MAX_BYTES / 1e6:.0f} MB. "
            "If the mesh is meant to be that large, thin it out."
        )
    for m in members:
        if m.flag_bits & 1:
            raise FileFormatError(f"{name} is encrypted. Save it without a password.")
        if m.file_size > _SMALL and m.file_size > MAX_RATIO * max(m.compress_size, 1):
            ratio = m.file_size / max(m.compress_size, 1)
            raise FileFormatError(
                f"{name}: the part '{m.filename}' unpacks to {ratio:.0f} times its size; the limit "
                f"is {MAX_RATIO}. It looks like a zip bomb and is not opened."
            )
        pieces = m.filename.replace("\\", "/").split("/")
        if ".." in pieces or m.filename.startswith(("/", "\\")) or ":" in pieces[0]:
            raise FileFormatError(
                f"{name}: the part '{m.filename}' points outside the package, so it is not opened."
            )


def _root_model(file: Path, archive: zipfile.ZipFile) -> zipfile.ZipInfo:
    for member in archive.infolist():
        if member.filename.lower().endswith("3d/3dmodel.model"):
            return member
    raise FileFormatError(
        f"{file.name} holds no 3D/3dmodel.model, so it is not a 3MF package of a part."
    )


def _attributes(text: bytes) -> dict[bytes, bytes]:
    return {key: one or two for key, one, two in _ATTRIBUTE.findall(text)}


def _root_unit(file: Path, model: bytes) -> str:
    match = re.search(rb"<(?:[\w.-]+:)?model\b([^>]*)>", model)
    if match is None:
        raise FileFormatError(f"{file.name}: its model part is damaged. Export it again.")
    root = _attributes(match.group(1))
    stated = root.get(b"unit", b"millimeter")
    if stated not in _UNITS:
        raise FileFormatError(
            f"{file.name} states the unit '{stated.decode(errors='replace')}', which 3MF does not "
            f"know. Export it in one of {', '.join(u.decode() for u in _UNITS)}."
        )
    for prefix in root.get(b"requiredextensions", b"").split():
        space = root.get(b"xmlns:" + prefix, prefix).decode(errors="replace")
        # Materials only colour a mesh, production only spreads it over several parts, and what is
        # inside a mesh (volumetric, with implicit functions) leaves its outline as it is.
        known = ("material", "production", "/volumetric/", "/implicit/")
        if not any(word in space.lower() for word in known):
            raise FileFormatError(
                f"{file.name} needs the 3MF extension '{space}', which is not read. Export the "
                "part as a plain mesh."
            )
    return _UNITS[stated]


def _check_placing(file: Path, model: bytes) -> tuple[str, ...]:
    """Refuse circles and floods of placed objects; name objects that are not part bodies."""
    parts: dict[bytes, list[bytes]] = {}
    items: list[bytes] = []
    odd: list[str] = []
    current: bytes | None = None
    for kind, text in _TAG.findall(model):
        values = _attributes(text)
        if kind == b"object":
            current = values.get(b"id", b"")
            parts[current] = []
            sort = values.get(b"type", b"model").decode(errors="replace")
            if sort not in ("model", "solidsupport"):
                shown = values.get(b"name", current).decode(errors="replace")
                odd.append(f"Object '{shown}' is marked as '{sort}'; it is read as a body.")
        elif kind == b"component" and current is not None:
            parts[current].append(values.get(b"objectid", b""))
        elif kind == b"item":
            items.append(values.get(b"objectid", b""))
    counts: dict[bytes, int] = {}

    def placed(key: bytes, above: tuple[bytes, ...]) -> int:
        if key in above:
            raise FileFormatError(
                f"{file.name}: object {key.decode(errors='replace')} contains itself. Export it "
                "again."
            )
        if len(above) > 64:
            raise FileFormatError(f"{file.name}: objects are nested more than 64 deep.")
        if key not in counts:
            below = parts.get(key, [])
            counts[key] = max(1, sum(placed(k, (*above, key)) for k in below))
        return counts[key]

    total = sum(placed(key, ()) for key in items)
    if not items:
        raise FileFormatError(
            f"{file.name} places no object (its build is empty). Export it with the part placed."
        )
    if total > MAX_PLACED:
        raise FileFormatError(
            f"{file.name} places {total} objects; the limit is {MAX_PLACED}. Export fewer copies."
        )
    return tuple(odd)

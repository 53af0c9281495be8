"""Files are written aside and renamed, so that none is ever half there."""

from __future__ import annotations

import errno
import json
import os
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from voxelmat.errors import ResourceError

__all__ = ["aside", "explain_os_error", "write_bytes", "write_json", "write_text"]

_REASONS = {
    errno.ENOSPC: "the disk is full; free some space or choose another folder",
    errno.EDQUOT: "the disk quota is used up; free some space or choose another folder",
    errno.EACCES: "the folder may not be written to; choose another or change its permissions",
    errno.EPERM: "the folder may not be written to; choose another or change its permissions",
    errno.EROFS: "the disk is read-only; choose another folder",
    errno.ENOENT: "its folder does not exist; make it first",
    errno.ENOTDIR: "a part of its path is a file, not a folder",
}


def explain_os_error(path: Path, error: OSError) -> ResourceError:
    """What the operating system's refusal means, for the user."""
    reason = _REASONS.get(error.errno or 0, error.strerror or str(error))
    return ResourceError(f"'{path}' could not be written: {reason}.")


@contextmanager
def aside(path: Path) -> Iterator[Path]:
    """Give a temporary path beside `path`; rename it over `path` when the block succeeds.

    Raises
    ------
    ResourceError
        Where the disk is full or the folder refuses; `path` is then as it was before.
    """
    handle, name = -1, ""
    try:
        handle, name = tempfile.mkstemp(prefix=f".{path.name}.", dir=path.parent)
        os.close(handle)
        temporary = Path(name)
        temporary.chmod(0o644)
        yield temporary
        temporary.replace(path)
    except OSError as error:
        raise explain_os_error(path, error) from error
    finally:
        if name:
            Path(name).unlink(missing_ok=True)


def write_bytes(path: Path, data: bytes) -> None:
    """Write a whole file or nothing."""
    with aside(path) as temporary, temporary.open("wb") as handle:
        handle.write(data)
        handle.flush()
        os.fsync(handle.fileno())


def write_text(path: Path, text: str) -> None:
    """Write a whole UTF-8 text or nothing."""
    write_bytes(path, text.encode())


def write_json(path: Path, value: Any) -> None:
    """Write plain data as indented JSON, or nothing; nan and infinity are refused."""
    write_text(path, json.dumps(value, indent=2, ensure_ascii=False, allow_nan=False) + "\n")

"""The folder in which a stack is written: locked, journalled, resumable, renamed when whole."""

from __future__ import annotations

import hashlib
import json
import shutil
import threading
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from voxelmat.errors import FileFormatError, ResourceError
from voxelmat.printing.manifest import FORMAT, MANIFEST, read_manifest
from voxelmat.printing.sums import OWN_FILES

__all__ = [
    "INDEX_FOLDER",
    "JOURNAL",
    "Journal",
    "LayerRecord",
    "locked",
    "publish",
    "refuse_foreign",
    "retired",
]

#: Lists the finished layers of a partial folder, one line of JSON each.
JOURNAL = "journal.jsonl"
_FRESH = f"{JOURNAL}.new"
#: Folder of images that hold all channels.
INDEX_FOLDER = "layers"
_IMAGES = (".png", ".page")


@dataclass(frozen=True, slots=True)
class LayerRecord:
    """One finished layer: SHA-256 of each file, set sites of each channel."""

    layer: int
    sha256: tuple[str, ...]
    sites: tuple[int, ...]

    def as_dict(self) -> dict[str, Any]:
        """Plain data."""
        return {"layer": self.layer, "sha256": list(self.sha256), "sites": list(self.sites)}

    @classmethod
    def from_dict(cls, data: Mapping[str, Any]) -> LayerRecord:
        """The inverse of `as_dict`; `LookupError` or `TypeError` for anything else."""
        return cls(data["layer"], tuple(data["sha256"]), tuple(data["sites"]))


@contextmanager
def locked(folder: Path) -> Iterator[None]:
    """Hold the lock beside `folder`; `ResourceError` where another run holds it."""
    import filelock

    lock = filelock.FileLock(folder.parent / f".{folder.name}.lock")
    try:
        folder.parent.mkdir(parents=True, exist_ok=True)
        lock.acquire(timeout=0)
    except filelock.Timeout:
        raise ResourceError(
            f"Another run is writing to '{folder.name}' at this moment. Wait for it to end, or "
            "give this one a folder of its own."
        ) from None
    except OSError as error:
        raise ResourceError(f"'{folder.parent}' cannot be written to: {error}.") from None
    try:
        yield
    finally:
        lock.release()


def _is_ours(folder: Path) -> bool:
    """True for a stack, whole or partial, that holds nothing but what we write."""
    if all(entry.name in (JOURNAL, _FRESH) for entry in folder.iterdir()):
        return True
    try:
        if (folder / JOURNAL).is_file():  # first, for a manifest beside it may be half-written
            first = json.loads((folder / JOURNAL).read_text("utf-8").splitlines()[0])
            if first["format"] != FORMAT:
                return False
            folders = set(first["folders"])
        else:
            folders = {INDEX_FOLDER, *(c["name"] for c in read_manifest(folder)["channels"])}
    except (FileFormatError, OSError, ValueError, LookupError, TypeError):
        return False
    for entry in folder.iterdir():
        if entry.name in (MANIFEST, JOURNAL, _FRESH, *OWN_FILES):
            continue
        if entry.is_symlink():
            return False
        if entry.is_file() and entry.suffix == ".tif" and entry.stem in folders:
            continue
        if entry.name not in folders or not entry.is_dir():
            return False
        if any(not (f.suffix in _IMAGES and f.stem.isdigit()) for f in entry.iterdir()):
            return False
    return True


def refuse_foreign(folder: Path) -> None:
    """Raise `ResourceError` if `folder` exists and holds anything that is not a stack of ours."""
    if folder.is_symlink() or (folder.exists() and not folder.is_dir()):
        raise ResourceError(f"'{folder.name}' exists and is not a folder; choose another name.")
    if folder.is_dir() and any(folder.iterdir()) and not _is_ours(folder):
        raise ResourceError(
            f"The folder '{folder.name}' exists and holds files that are not a stack. Nothing was "
            "changed; choose another folder or empty this one."
        )


def _remove(folder: Path) -> None:
    """Delete a folder of ours; images first, so that a rest still shows whose it is."""
    if folder.is_dir():
        for entry in folder.iterdir():
            if entry.is_dir():
                shutil.rmtree(entry)
            elif entry.suffix == ".tif":
                entry.unlink()
        shutil.rmtree(folder)


def retired(folder: Path) -> Path:
    """Where an earlier stack lies for the moment in which the new one takes its name."""
    return folder.with_name(f"{folder.name}.old")


def publish(partial: Path, folder: Path) -> None:
    """Put the finished `partial` in the place of `folder`; both are ours."""
    old = retired(folder)
    _remove(old)
    if folder.exists():
        folder.rename(old)
    partial.rename(folder)
    (folder / JOURNAL).unlink()
    _remove(old)


class Journal:
    """What is finished in the partial folder; safe to use from threads.

    Parameters
    ----------
    partial : Path
        Created where it is missing; emptied where it belongs to another job.
    job : str
        Digest of everything that decides the bits.
    folders : sequence of str
        Folders that hold the files.
    names : callable
        Files of a layer, as paths inside the folder.
    resume : bool
        Keep the layers of an earlier run of the same job whose files still have their digest.
    """

    def __init__(
        self,
        partial: Path,
        job: str,
        folders: Sequence[str],
        names: Callable[[int], Sequence[str]],
        *,
        resume: bool,
    ) -> None:
        refuse_foreign(partial)
        self.partial = partial
        self._names = names
        self._lock = threading.Lock()
        self.done: dict[int, LayerRecord] = {}
        head = {"format": FORMAT, "job": job, "folders": list(folders)}
        if resume:
            self.done = self._surviving(head)
        if not self.done:
            _remove(partial)
        partial.mkdir(exist_ok=True)
        lines = [head, *(r.as_dict() for r in self.done.values())]
        fresh = partial / _FRESH
        fresh.write_text("".join(json.dumps(line) + "\n" for line in lines), encoding="utf-8")
        fresh.replace(partial / JOURNAL)
        (partial / MANIFEST).unlink(missing_ok=True)
        for name in folders:
            (partial / name).mkdir(exist_ok=True)
        self._handle = (partial / JOURNAL).open("a", encoding="utf-8")

    def _surviving(self, head: dict[str, Any]) -> dict[int, LayerRecord]:
        """Journalled layers of the same job whose files are on disk, unchanged."""
        found: dict[int, LayerRecord] = {}
        try:
            lines = (self.partial / JOURNAL).read_text("utf-8").splitlines()
            if not lines or json.loads(lines[0]) != head:
                return found
        except (OSError, ValueError):
            return found
        for line in lines[1:]:
            try:
                record = LayerRecord.from_dict(json.loads(line))
            except (ValueError, KeyError, TypeError):
                continue  # the line that was being written when the run was stopped
            if self._intact(record):
                found[record.layer] = record
        return found

    def _intact(self, record: LayerRecord) -> bool:
        names = self._names(record.layer)
        if len(record.sha256) != len(names):
            return False
        for name, wanted in zip(names, record.sha256, strict=True):
            try:
                data = (self.partial / name).read_bytes()
            except OSError:
                return False
            if hashlib.sha256(data).hexdigest() != wanted:
                return False
        return True

    def add(self, record: LayerRecord) -> None:
        """Note a layer whose files are written."""
        with self._lock:
            self._handle.write(json.dumps(record.as_dict()) + "\n")
            self._handle.flush()
            self.done[record.layer] = record

    def close(self) -> None:
        """Close the journal's file; the folder stays for a later run."""
        self._handle.close()

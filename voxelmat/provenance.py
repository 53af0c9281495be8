"""Where a result came from: versions, input digests, seed, threads, times."""

from __future__ import annotations

import hashlib
import json
import platform
from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import UTC, datetime
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path

__all__ = ["Provenance", "file_digest", "text_digest", "utc_now", "versions"]

_PACKAGES = ("voxelmat", "numpy", "scipy", "numba", "trimesh", "isal")


def utc_now() -> str:
    """The present moment in UTC, ISO 8601, to the second."""
    return datetime.now(UTC).strftime("%Y-%m-%dT%H:%M:%SZ")


def versions() -> dict[str, str]:
    """Versions of Python and of the packages that the numbers depend on."""
    found = {"python": platform.python_version()}
    for name in _PACKAGES:
        try:
            found[name] = version(name)
        except PackageNotFoundError:
            found[name] = "not installed"
    return found


def file_digest(path: Path) -> str:
    """SHA-256 of a file's bytes, as hexadecimal text."""
    with path.open("rb") as handle:
        return hashlib.file_digest(handle, "sha256").hexdigest()


def text_digest(value: object) -> str:
    """SHA-256 of plain data (anything `json` can write), keys sorted."""
    text = json.dumps(value, sort_keys=True, separators=(",", ":"), ensure_ascii=False)
    return hashlib.sha256(text.encode()).hexdigest()


@dataclass(frozen=True, slots=True, kw_only=True)
class Provenance:
    """Goes with every result and manifest; the times stay out of digests.

    Attributes
    ----------
    versions : mapping
        Package to version.
    inputs : mapping
        Input name (a file name, never a path) to SHA-256.
    seed, threads : int
    started_utc, finished_utc : str
        ISO 8601.
    """

    versions: Mapping[str, str] = field(default_factory=versions)
    inputs: Mapping[str, str] = field(default_factory=dict)
    seed: int = 0
    threads: int = 1
    started_utc: str = field(default_factory=utc_now)
    finished_utc: str = ""

    def as_dict(self) -> dict[str, object]:
        """Plain data for JSON."""
        return {
            "versions": dict(self.versions),
            "inputs": dict(self.inputs),
            "seed": self.seed,
            "threads": self.threads,
            "started_utc": self.started_utc,
            "finished_utc": self.finished_utc,
        }

"""What every run needs round its stages: a folder of its own and a clock."""

from __future__ import annotations

import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path

from filelock import FileLock, Timeout

from voxelmat.errors import ResourceError
from voxelmat.io.atomic import explain_os_error

__all__ = ["Clock", "held"]


@dataclass(slots=True)
class Clock:
    """Seconds a stage."""

    seconds: dict[str, float] = field(default_factory=dict)

    @contextmanager
    def stage(self, name: str) -> Iterator[None]:
        """Count the time within to a stage."""
        start = time.perf_counter()
        try:
            yield
        finally:
            self.seconds[name] = self.seconds.get(name, 0.0) + time.perf_counter() - start


@contextmanager
def held(folder: Path) -> Iterator[None]:
    """Make the folder and keep other runs out of it."""
    try:
        folder.mkdir(parents=True, exist_ok=True)
        lock = FileLock(folder / ".voxelmat.lock", timeout=0)
        lock.acquire()
    except Timeout:
        raise ResourceError(
            f"Another run is writing to '{folder}'. Wait for it to end, or choose another --out."
        ) from None
    except OSError as error:
        raise explain_os_error(folder, error) from error
    try:
        yield
    finally:
        lock.release()

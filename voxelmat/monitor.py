"""Progress, cancellation and the one lock round parallel kernels."""

from __future__ import annotations

import threading
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Protocol

__all__ = ["SILENT", "CancelFlag", "Figure", "Monitor", "Silent", "computing"]

Figure = float | int | str


class Monitor(Protocol):
    """Whoever wants to follow long work implements this one method."""

    def report(self, stage: str, *, done: int, total: int, **figures: Figure) -> None:
        """Take note of progress.

        Parameters
        ----------
        stage : str
            What is going on, in the user's words ("solving", "writing layers").
        done, total : int
            Steps finished and steps in all; ``total`` 0 when it is not known.
        **figures : float or str
            Numbers that matter at this step, for example ``residual=1e-5``.

        Raises
        ------
        Cancelled
            To stop the work at this safe point.
        """


class Silent:
    """The default monitor: says nothing, never cancels."""

    def report(self, stage: str, *, done: int, total: int, **figures: Figure) -> None:
        """Ignore the report."""


SILENT = Silent()


class CancelFlag:
    """A monitor that passes reports on and raises `Cancelled` once `cancel` was called."""

    def __init__(self, inner: Monitor = SILENT) -> None:
        self._inner = inner
        self._event = threading.Event()

    def cancel(self) -> None:
        """Ask the work to stop at its next report; safe from any thread."""
        self._event.set()

    def report(self, stage: str, *, done: int, total: int, **figures: Figure) -> None:
        """Pass the report on, or raise `Cancelled`."""
        from voxelmat.errors import Cancelled

        if self._event.is_set():
            raise Cancelled(f"Stopped by the user during: {stage} ({done} of {total}).")
        self._inner.report(stage, done=done, total=total, **figures)


# Two Python threads inside numba's parallel kernels abort the process on its workqueue
# layer, so every public call that runs one holds this lock.
_COMPUTE = threading.RLock()


@contextmanager
def computing() -> Iterator[None]:
    """Hold the process-wide compute lock; re-entrant in one thread."""
    with _COMPUTE:
        yield

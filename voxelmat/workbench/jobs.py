"""Long work beside the screen: one worker, progress, cancel, and newer work in place of older."""

from __future__ import annotations

import asyncio
import threading
import time
from collections import deque
from collections.abc import Callable, Generator
from typing import Any, Generic, TypeVar

from voxelmat.errors import Cancelled, VoxelmatError
from voxelmat.monitor import Figure, Monitor

__all__ = ["Job", "Jobs"]

T = TypeVar("T")
#: Seconds between two reports of progress to the screen.
_PACE = 0.1


class Job(Generic[T]):
    """One piece of work; ``job.wait()`` or ``await job`` gives what it returns.

    Attributes
    ----------
    name : str
        In the user's words: "solving".
    state : str
        ``"waiting"``, ``"running"``, ``"done"``, ``"stopped"`` or ``"failed"``.
    stage : str
    done, total : int
        Progress within the stage; total 0 where it is not known.
    figures : dict
        The latest numbers that the work reported.
    error : BaseException or None
    seconds : float
        How long it has run.
    """

    def __init__(self, name: str, work: Callable[[Monitor], T], key: str, tell: Any) -> None:
        self.name = name
        self.key = key
        self.state = "waiting"
        self.stage = name
        self.done, self.total = 0, 0
        self.figures: dict[str, Figure] = {}
        self.error: BaseException | None = None
        self._work = work
        self._tell = tell
        self._result: T | None = None
        self._cancel = threading.Event()
        self._ended = threading.Event()
        self._told = 0.0
        self._started = self._stopped = 0.0

    # ------------------------------------------------------------------ for the owner
    @property
    def over(self) -> bool:
        """True once it will do nothing more."""
        return self._ended.is_set()

    @property
    def seconds(self) -> float:
        """How long it has run, s."""
        if not self._started:
            return 0.0
        return (self._stopped or time.monotonic()) - self._started

    def cancel(self) -> None:
        """Ask it to stop at its next safe point; what it finished is kept."""
        self._cancel.set()

    def wait(self, timeout: float | None = None) -> T:
        """Wait and return the result.

        An interrupt (the stop button of the notebook) cancels the work.

        Raises
        ------
        TimeoutError
            After `timeout` seconds; the work goes on.
        Cancelled, VoxelmatError
            What stopped the work.
        """
        end = None if timeout is None else time.monotonic() + timeout
        try:
            while not self._ended.wait(0.1):
                if end is not None and time.monotonic() > end:
                    raise TimeoutError(f"'{self.name}' still runs after {timeout:g} s.")
        except KeyboardInterrupt:
            self.cancel()
            raise
        if self.error is not None:
            raise self.error
        return self._result  # type: ignore[return-value]

    def __await__(self) -> Generator[Any, None, T]:
        return asyncio.to_thread(self.wait).__await__()

    # ------------------------------------------------------------------ the monitor
    def report(self, stage: str, *, done: int, total: int, **figures: Figure) -> None:
        """Take note of progress; raise `Cancelled` where it is to stop."""
        if self._cancel.is_set():
            raise Cancelled(f"Stopped during: {stage} ({done} of {total}).")
        self.stage, self.done, self.total = stage, done, total
        self.figures.update(figures)
        now = time.monotonic()
        if now - self._told >= _PACE:
            self._told = now
            self._tell(self)

    # ------------------------------------------------------------------ the worker
    def _run(self) -> None:
        if self._cancel.is_set():
            self._end("stopped", Cancelled(f"'{self.name}' was stopped before it began."))
            return
        self.state, self._started = "running", time.monotonic()
        self._tell(self)
        try:
            self._result = self._work(self)
        except Cancelled as error:
            self._end("stopped", error)
        except Exception as error:  # noqa: BLE001 (kept for whoever waits, and shown)
            self._end("failed", error)
        else:
            self._end("done", None)

    def _end(self, state: str, error: BaseException | None) -> None:
        self.state, self.error, self._stopped = state, error, time.monotonic()
        self._ended.set()
        self._tell(self)

    @property
    def message(self) -> str:
        """Why it failed, in words for the screen; empty where it did not."""
        if self.state != "failed" or self.error is None:
            return ""
        if isinstance(self.error, VoxelmatError):
            return str(self.error)
        return f"A fault in voxelmat ({type(self.error).__name__}): {self.error}"


class Jobs:
    """A queue with one worker thread.

    Parameters
    ----------
    changed : callable
        ``changed(job)`` on the worker's thread: when a job starts, reports (at most ten times a
        second) and ends.
    """

    def __init__(self, changed: Callable[[Job[Any]], None] = lambda job: None) -> None:
        self._changed = changed
        self._queue: deque[Job[Any]] = deque()
        self._ready = threading.Condition()
        self._closed = False
        self.current: Job[Any] | None = None
        self._thread: threading.Thread | None = None

    def submit(self, name: str, work: Callable[[Monitor], T], *, key: str = "") -> Job[T]:
        """Queue work.

        Parameters
        ----------
        name : str
        work : callable
            ``work(monitor)``; what it needs it holds by itself, captured now.
        key : str
            Waiting and running work of the same key is cancelled: the newest counts.

        Returns
        -------
        Job
        """
        job: Job[T] = Job(name, work, key, self._changed)
        with self._ready:
            if self._closed:
                raise RuntimeError("The workbench is closed; open it again.")
            if key:
                for older in [*self._queue, *([self.current] if self.current else [])]:
                    if older.key == key:
                        older.cancel()
            self._queue.append(job)
            if self._thread is None:
                self._thread = threading.Thread(
                    target=self._serve, name="voxelmat-work", daemon=True
                )
                self._thread.start()
            self._ready.notify_all()
        return job

    def _serve(self) -> None:
        while True:
            with self._ready:
                while not self._queue:
                    if self._closed:
                        return
                    self._ready.wait()
                job = self.current = self._queue.popleft()
            job._run()
            with self._ready:
                self.current = None
                self._ready.notify_all()

    def settle(self, timeout: float = 600.0) -> None:
        """Wait until nothing waits or runs any more; how the work ended does not matter.

        Raises
        ------
        TimeoutError
            After `timeout` seconds.
        """
        with self._ready:
            if not self._ready.wait_for(lambda: not self._queue and self.current is None, timeout):
                raise TimeoutError(f"There is still work to do after {timeout:g} s.")

    def cancel_all(self) -> None:
        """Ask everything that waits or runs to stop."""
        with self._ready:
            for job in [*self._queue, *([self.current] if self.current else [])]:
                job.cancel()

    def close(self) -> None:
        """Stop the work and the thread."""
        self.cancel_all()
        with self._ready:
            self._closed = True
            self._ready.notify_all()

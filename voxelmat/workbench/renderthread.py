"""One thread that may touch VTK: callbacks come on any thread, OpenGL belongs to one."""

from __future__ import annotations

import atexit
import threading
from collections.abc import Callable
from concurrent.futures import Future
from queue import SimpleQueue
from typing import ParamSpec, Protocol, TypeVar

__all__ = ["close_at_end", "forget", "on_render_thread"]

P = ParamSpec("P")
T = TypeVar("T")


class _Closes(Protocol):
    def close(self) -> None: ...


class _RenderThread:
    """One daemon thread that runs what it is given, in order, until the interpreter ends."""

    def __init__(self) -> None:
        self._jobs: SimpleQueue[Callable[[], None] | None] = SimpleQueue()
        self._thread = threading.Thread(target=self._work, name="voxelmat-render", daemon=True)
        self._thread.start()

    def _work(self) -> None:
        while (job := self._jobs.get()) is not None:
            job()
            del job  # it holds what was drawn, while this waits for the next

    def call(self, function: Callable[P, T], *args: P.args, **kwargs: P.kwargs) -> T:
        """Run on the render thread and wait for the answer."""
        if threading.current_thread() is self._thread:
            return function(*args, **kwargs)
        if not self._thread.is_alive():
            raise RuntimeError("The program is ending; nothing is drawn any more.")
        answer: Future[T] = Future()

        def job() -> None:
            try:
                answer.set_result(function(*args, **kwargs))
            except BaseException as error:  # noqa: BLE001 (handed to the caller, not hidden)
                answer.set_exception(error)

        self._jobs.put(job)
        return answer.result()

    def stop(self) -> None:
        """End after what is queued."""
        self._jobs.put(None)
        self._thread.join(timeout=10)


_lock = threading.RLock()  # a widget may be collected, and closed, while it is held
_thread: _RenderThread | None = None
_open: set[_Closes] = set()


def _the_thread() -> _RenderThread:
    global _thread
    with _lock:
        if _thread is None:
            _thread = _RenderThread()
            atexit.register(_shut_down)
        return _thread


def _shut_down() -> None:
    if _thread is not None:
        for scene in list(_open):
            scene.close()
        _thread.stop()


def on_render_thread(function: Callable[P, T], *args: P.args, **kwargs: P.kwargs) -> T:
    """Run `function` on the one thread that may touch VTK, and wait for its answer."""
    return _the_thread().call(function, *args, **kwargs)


def close_at_end(scene: _Closes) -> None:
    """Have `scene` closed before the interpreter ends."""
    _open.add(scene)


def forget(scene: _Closes) -> None:
    """`scene` is closed already."""
    _open.discard(scene)

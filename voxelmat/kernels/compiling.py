"""Who is compiled, and how long it takes: a stopwatch on numba."""

import threading
import time
from contextlib import contextmanager

from numba.core import event

__all__ = ["stopwatch"]


class _Stopwatch(event.Listener):
    """Adds up the seconds of each outermost function; what it compiles on the way is part of it."""

    def __init__(self, seconds):
        self._seconds = seconds
        self._open = {}

    def on_start(self, event):
        self._open.setdefault(threading.get_ident(), []).append(time.perf_counter())

    def on_end(self, event):
        started = self._open[threading.get_ident()].pop()
        if self._open[threading.get_ident()]:
            return
        function = event.data["dispatcher"].py_func
        name = f"{function.__module__.rpartition('.')[2]}.{function.__name__}"
        self._seconds[name] = self._seconds.get(name, 0.0) + time.perf_counter() - started


@contextmanager
def stopwatch():
    """Yield a dict that fills with seconds a kernel (``module.function``).

    What comes from the cache on disk takes no time and is not in it.
    """
    seconds = {}
    with event.install_listener("numba:compile", _Stopwatch(seconds)):
        yield seconds

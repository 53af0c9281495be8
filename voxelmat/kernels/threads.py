"""How many threads parallel kernels use: fewer on small grids, where waiting costs more."""

from contextlib import contextmanager

import numba

# Nodes that are worth a thread of their own.
_WORTH = 16384


def threads() -> int:
    """Threads of the parallel kernels called from this Python thread."""
    return numba.get_num_threads()


def set_threads(count):
    """Use `count` threads from now on in this Python thread; never more than numba started with."""
    numba.set_num_threads(max(1, min(int(count), numba.config.NUMBA_NUM_THREADS)))


@contextmanager
def crew(nodes):
    """Inside, use no more threads than `nodes` keep busy; results do not depend on it."""
    before = numba.get_num_threads()
    wanted = max(1, min(before, nodes // _WORTH))
    if wanted == before:
        yield
        return
    numba.set_num_threads(wanted)
    try:
        yield
    finally:
        numba.set_num_threads(before)

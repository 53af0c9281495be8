"""How many threads parallel kernels will use."""

import numba


def threads():
    """Threads of the parallel kernels called from this Python thread."""
    return numba.get_num_threads()


def set_threads(count):
    """Use `count` threads from now on in this Python thread; never more than numba started with."""
    numba.set_num_threads(max(1, min(int(count), numba.config.NUMBA_NUM_THREADS)))

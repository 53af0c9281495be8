"""Slabs of layers written by worker processes, here or through a dask.distributed scheduler."""

from __future__ import annotations

import ctypes
import json
import multiprocessing
import os
import signal
import sys
import threading
import time
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import FIRST_COMPLETED, Executor, Future, ProcessPoolExecutor, wait
from concurrent.futures.process import BrokenProcessPool
from contextlib import contextmanager
from functools import lru_cache
from importlib import import_module
from multiprocessing.connection import wait as wait_for_sentinel
from pathlib import Path
from typing import Any

from voxelmat.errors import InputError, ResourceError
from voxelmat.monitor import Monitor
from voxelmat.printing.imagefiles import ImageFiles
from voxelmat.printing.job import PrintJob
from voxelmat.printing.jobfolder import JOB_FILE, described, load_job
from voxelmat.printing.journal import Journal, LayerRecord
from voxelmat.printing.source import Dealer, LayerSource, source_of
from voxelmat.printing.writer import image_files, missing_slabs

__all__ = ["ANSWER_WITHIN", "LOST_AFTER", "write_apart", "write_slab"]

#: A scheduler without any worker is given up after so many seconds.
LOST_AFTER = 30.0
#: A scheduler answers within so many seconds, or is not there.
ANSWER_WITHIN = 10.0
_M_MMAP_THRESHOLD = -3  # of malloc.h: allocations from this size on are mapped each by itself
_POLL = 0.25  # seconds between looks at the monitor

_KILLED = (
    "A worker process came to an end before its work did: it was killed, perhaps for want of "
    "memory (fewer workers use less), or it could not start (a script of your own that asks for "
    "workers needs the line if __name__ == '__main__')."
)

_opening = threading.Lock()


# ---------------------------------------------------------------------- in the worker
@lru_cache(maxsize=1)
def _opened(place: str, written_ns: int) -> tuple[LayerSource, Dealer, ImageFiles]:
    """What a job's layers come from; `written_ns` tells one description from the next."""
    del written_ns
    _give_back_memory()
    job = load_job(Path(place))
    return source_of(job, Path(place)), Dealer(job), image_files(job)


def _give_back_memory() -> None:
    """Have freed arrays go back to the system at once, where the C library is glibc.

    Else it keeps ever larger ones for later, and the peak creeps up by a tenth over the first
    hundred layers of a tray (measured).
    """
    if sys.platform != "linux":
        return
    mallopt = getattr(ctypes.CDLL(None), "mallopt", None)
    if mallopt is not None:
        mallopt(_M_MMAP_THRESHOLD, 256 << 10)


def write_slab(place: str, partial: str, first: int, last: int) -> list[LayerRecord]:
    """Write the image files of layers ``first`` to ``last - 1``; the same however often.

    Parameters
    ----------
    place : str
        Folder in which the job is described; see `voxelmat.printing.jobfolder`.
    partial : str
        Folder of the unfinished stack.
    first, last : int

    Returns
    -------
    list of LayerRecord
        Short of the last layers where the job was called off.
    """
    description = Path(place) / JOB_FILE
    try:
        with _opening:
            source, dealer, images = _opened(place, description.stat().st_mtime_ns)
    except FileNotFoundError:
        return []
    records = []
    with (Path(place) / f"slab-{first}.jsonl").open("w", encoding="utf-8") as notes:
        for layer, sites in enumerate(source.sites(first, last), start=first):
            if not description.exists():
                break
            record = images.write(Path(partial), layer, dealer.planes(sites, layer))
            records.append(record)
            notes.write(json.dumps(record.as_dict()) + "\n")
            notes.flush()
    return records


def _start_process() -> None:
    """Leave interrupts to the parent, and do not outlive it."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    parent = multiprocessing.parent_process()
    if parent is None:
        return

    def watch() -> None:
        wait_for_sentinel([parent.sentinel])
        os._exit(1)

    threading.Thread(target=watch, daemon=True).start()


# ---------------------------------------------------------------------- in the parent
def write_apart(
    job: PrintJob,
    folder: Path,
    journal: Journal,
    monitor: Monitor,
    workers: int,
    scheduler: str | None,
    size: int,
) -> None:
    """Have all missing layers written by other processes, and journal what they report.

    Parameters
    ----------
    job : PrintJob
    folder : Path
        Of the finished stack; the job is described beside it.
    journal : Journal
        Only this process writes to it.
    monitor : Monitor
    workers : int
        Processes on this machine; not used with a scheduler.
    scheduler : str or None
        Address of a dask.distributed scheduler, ``tcp://host:port``.
    size : int
        Layers of a slab.

    Raises
    ------
    ResourceError
        If a worker was killed, or the scheduler cannot be reached or lost its workers; finished
        layers are in the journal.
    """
    total = job.window.image_shape[0]
    slabs = missing_slabs(journal, total, size)
    monitor.report("writing layers", done=len(journal.done), total=total)
    if not slabs:
        return
    pool = _dask(scheduler) if scheduler else _processes(min(workers, len(slabs)))
    with described(job, folder) as place, _kept(place, journal):
        # Made once here, for the support fields that all workers share.
        source_of(load_job(place), place)
        with pool as (executor, alive):
            _follow(executor, alive, place, journal, slabs, monitor, total)


@contextmanager
def _kept(place: Path, journal: Journal) -> Iterator[None]:
    """On the way out, journal the finished layers of slabs that are not; say what was lost."""
    try:
        yield
    except (BrokenProcessPool, _Lost) as error:
        _salvage(place, journal)
        raise ResourceError(
            f"{error if isinstance(error, _Lost) else _KILLED} {len(journal.done)} finished layers "
            "are kept; run the same command again, and it goes on from there."
        ) from None
    finally:
        _salvage(place, journal)


class _Lost(Exception):
    """There is nobody left to do the work."""


def _follow(
    pool: Executor,
    alive: Callable[[], bool],
    place: Path,
    journal: Journal,
    slabs: Sequence[tuple[int, int]],
    monitor: Monitor,
    total: int,
) -> None:
    """Hand out the slabs and take in what is done, until all is or something goes wrong."""
    stage = "writing layers"
    open_: set[Future[list[LayerRecord]]] = set()
    seen = time.monotonic()
    try:
        for first, last in slabs:
            open_.add(pool.submit(write_slab, str(place), str(journal.partial), first, last))
        while open_:
            finished, open_ = wait(open_, timeout=_POLL, return_when=FIRST_COMPLETED)
            for future in finished:
                for record in future.result():
                    journal.add(record)
            if finished or alive():
                seen = time.monotonic()
            elif time.monotonic() - seen > LOST_AFTER:
                raise _Lost(f"The scheduler has had no workers for {LOST_AFTER:g} s.")
            monitor.report(stage, done=len(journal.done), total=total)
    finally:
        if open_:
            (place / JOB_FILE).unlink(missing_ok=True)
        for future in open_:
            future.cancel()


def _salvage(place: Path, journal: Journal) -> None:
    """Journal the layers of slabs that were not finished."""
    for notes in sorted(place.glob("slab-*.jsonl")):
        for line in notes.read_text("utf-8").splitlines():
            try:
                record = LayerRecord.from_dict(json.loads(line))
            except (ValueError, LookupError, TypeError):
                continue  # the line that was being written when the worker was stopped
            if record.layer not in journal.done:
                journal.add(record)


@contextmanager
def _processes(count: int) -> Iterator[tuple[Executor, Callable[[], bool]]]:
    """Spawned, for forked ones would inherit locks of numba's threads."""
    context = multiprocessing.get_context("spawn")
    pool = ProcessPoolExecutor(count, mp_context=context, initializer=_start_process)
    try:
        yield pool, lambda: True
    finally:
        pool.shutdown(wait=True, cancel_futures=True)


@contextmanager
def _dask(address: str) -> Iterator[tuple[Executor, Callable[[], bool]]]:
    try:
        distributed: Any = import_module("distributed")
    except ImportError:
        raise InputError(
            "A scheduler needs the package 'distributed'; install voxelmat[scale].", key="scheduler"
        ) from None
    try:
        client = distributed.Client(address, timeout=ANSWER_WITHIN, set_as_default=False)
    except (OSError, ValueError, TypeError) as error:
        raise ResourceError(
            f"No dask.distributed scheduler answers at '{address}' ({error}); start one or write "
            "without --scheduler."
        ) from error
    try:
        yield client.get_executor(pure=False), lambda: bool(client.nthreads())
    finally:
        client.close()

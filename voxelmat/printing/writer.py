"""Write the layers of a stack slab by slab on several threads, journalling each whole layer."""

from __future__ import annotations

import threading
from concurrent.futures import FIRST_COMPLETED, Future, ThreadPoolExecutor, wait

from voxelmat.errors import Cancelled
from voxelmat.monitor import Monitor
from voxelmat.printing.imagefiles import ImageFiles
from voxelmat.printing.job import PrintJob
from voxelmat.printing.journal import Journal
from voxelmat.printing.source import Dealer, LayerSource

__all__ = ["LayerWriter", "image_files", "missing_slabs", "write_layers"]


class LayerWriter:
    """Makes, encodes, writes and journals slabs of layers; one object serves all threads.

    Parameters
    ----------
    source : LayerSource
    dealer : Dealer
        From materials to channels.
    images : ImageFiles
    journal : Journal
    """

    def __init__(
        self, source: LayerSource, dealer: Dealer, images: ImageFiles, journal: Journal
    ) -> None:
        self.source = source
        self.journal = journal
        self.stop = threading.Event()
        self._dealer = dealer
        self._images = images

    @property
    def n_layers(self) -> int:
        """Layers of the whole stack."""
        return self._images.n_layers

    def slab(self, first: int, last: int) -> None:
        """Write the layers ``first`` to ``last - 1``."""
        for layer, sites in enumerate(self.source.sites(first, last), start=first):
            if self.stop.is_set():
                return
            planes = self._dealer.planes(sites, layer)
            self.journal.add(self._images.write(self.journal.partial, layer, planes))


def image_files(job: PrintJob) -> ImageFiles:
    """The files that a job's layers go to."""
    return ImageFiles(job.window, job.channel_names, job.profile)


def missing_slabs(journal: Journal, n_layers: int, size: int) -> list[tuple[int, int]]:
    """Runs of layers that are still to be written, cut to `size`."""
    slabs: list[tuple[int, int]] = []
    for layer in range(n_layers):
        if layer in journal.done:
            continue
        if slabs and slabs[-1][1] == layer and layer - slabs[-1][0] < size:
            slabs[-1] = (slabs[-1][0], layer + 1)
        else:
            slabs.append((layer, layer + 1))
    return slabs


def write_layers(writer: LayerWriter, monitor: Monitor, threads: int, size: int) -> None:
    """Write all missing layers; on any error or cancel, stop at whole layers and pass it on."""
    total = writer.n_layers
    stage = "writing layers"
    monitor.report(stage, done=len(writer.journal.done), total=total)
    pool = ThreadPoolExecutor(threads, thread_name_prefix="voxelmat-slice")
    try:
        open_: set[Future[None]] = {
            pool.submit(writer.slab, a, b) for a, b in missing_slabs(writer.journal, total, size)
        }
        while open_:
            finished, open_ = wait(open_, timeout=0.25, return_when=FIRST_COMPLETED)
            for future in finished:
                future.result()
            monitor.report(stage, done=len(writer.journal.done), total=total)
    finally:
        writer.stop.set()
        pool.shutdown(wait=True, cancel_futures=True)
    if len(writer.journal.done) != total:
        raise Cancelled(f"Stopped with {len(writer.journal.done)} of {total} layers written.")

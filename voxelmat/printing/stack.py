"""Write a part as a stack of one-bit images: streamed, resumable, published only when whole."""

from __future__ import annotations

import os
from collections import Counter
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from voxelmat.errors import FileFormatError, InputError, ResourceError
from voxelmat.io.bigpart import AnyPart
from voxelmat.model.halftone import Halftone
from voxelmat.model.profile import PrintProfile
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.designed import designed_volumes
from voxelmat.printing.imagefiles import ImageFiles
from voxelmat.printing.job import PrintJob, one_part_job
from voxelmat.printing.journal import Journal, LayerRecord, locked, publish, refuse_foreign, retired
from voxelmat.printing.manifest import FORMAT, FORMAT_NUMBER, image_entry, write_manifest
from voxelmat.printing.readback import Stack, read_stack
from voxelmat.printing.source import Dealer, source_of
from voxelmat.printing.sums import add_sums
from voxelmat.printing.workers import write_apart
from voxelmat.printing.writer import LayerWriter, image_files, write_layers
from voxelmat.provenance import Provenance, utc_now

__all__ = ["write_job", "write_stack"]


def write_stack(
    part: AnyPart,
    profile: PrintProfile,
    folder: str | Path,
    *,
    orientation: Sequence[str] = (),
    position: tuple[float, float] | None = None,
    support: str | None = None,
    seed: int = 0,
    halftone: Halftone | None = None,
    notes: Mapping[str, Any] | None = None,
    monitor: Monitor = SILENT,
    resume: bool = True,
    inputs: Mapping[str, str] | None = None,
    workers: int = 1,
    threads: int | None = None,
    scheduler: str | None = None,
    slab: int = 16,
) -> Stack:
    """Slice and halftone one part into a folder of images; `write_job` for a whole tray.

    Parameters
    ----------
    part : Part or StoredPart
    profile : PrintProfile
    folder : str or Path
        As for `write_job`.
    orientation : sequence of str
        Turns by multiples of 90 degrees about the tray's axes, in order: ``["x 90"]``.
    position : tuple of float, optional
        Low x and y corner of the part on the tray, mm; the middle of the tray if left out.
    support : str, optional
        One of `voxelmat.model.profile.SUPPORT_POLICIES`; the profile's if left out.
    seed : int
        Moves the start of the blue-noise mask.
    halftone : Halftone, optional
    notes : mapping, optional
        Plain data for the manifest.
    monitor, resume, inputs, workers, threads, scheduler, slab
        As for `write_job`.

    Returns
    -------
    Stack

    Raises
    ------
    InputError
        If the part does not fit the tray or the channels, or an option is not known.
    ResourceError, Cancelled
        As `write_job`.
    """
    job = one_part_job(
        part,
        profile,
        orientation=orientation,
        position=position,
        support=support,
        seed=seed,
        halftone=halftone,
        notes=notes,
    )
    return write_job(
        job,
        folder,
        monitor=monitor,
        resume=resume,
        inputs=inputs,
        workers=workers,
        threads=threads,
        scheduler=scheduler,
        slab=slab,
    )


def write_job(
    job: PrintJob,
    folder: str | Path,
    *,
    monitor: Monitor = SILENT,
    resume: bool = True,
    inputs: Mapping[str, str] | None = None,
    workers: int = 1,
    threads: int | None = None,
    scheduler: str | None = None,
    slab: int = 16,
) -> Stack:
    """Slice and halftone a tray into one folder of images.

    Parameters
    ----------
    job : PrintJob
    folder : str or Path
        Appears only when everything is written; until then work goes to ``<folder>.partial``.
        An earlier stack of this name is replaced then; any other content is refused. A lock
        file ``.<folder>.lock`` stays beside it.
    monitor : Monitor
    resume : bool
        Keep the layers that an interrupted run of the same job has finished; a finished stack
        of the same job is checked and returned as it is.
    inputs : mapping, optional
        Names of input files and their SHA-256, for the manifest.
    workers : int
        Processes; more than one are started anew and have one thread each, so that memory is
        bounded a worker. A script that asks for them needs ``if __name__ == "__main__"``.
    threads : int, optional
        Threads of a single process; all cores if left out.
    scheduler : str, optional
        Address of a dask.distributed scheduler, ``tcp://host:port``, whose workers write the
        layers instead. They need the same versions and see the folders under the same paths.
    slab : int
        Layers a unit of work. Neither it nor the workers change a bit.

    Returns
    -------
    Stack

    Raises
    ------
    InputError
        If the job cannot be sliced, or an option is not known.
    ResourceError
        If the disk is full, another run writes to the folder, or it holds other files. Finished
        layers are kept for the next run; nothing appears under `folder`.
    Cancelled
        From the monitor; finished layers are kept.
    """
    folder = Path(folder).absolute()
    if not folder.name:
        raise InputError(f"'{folder}' cannot be the folder of a stack; name a new one.")
    _check_counts(workers, threads, slab)
    started = utc_now()
    inputs = dict(inputs or {})
    digest = job.digest(inputs)
    apart = workers > 1 or scheduler is not None
    threads = workers if apart else _cores(threads)
    with locked(folder):
        for target in (folder, retired(folder)):
            refuse_foreign(target)
        finished = _finished(folder, digest) if resume else None
        if finished is not None:
            return finished
        partial = folder.with_name(f"{folder.name}.partial")
        with _disk_errors(partial):
            images = image_files(job)
            journal = Journal(partial, digest, images.folders, images.names, resume=resume)
            try:
                size = images.n_layers if job.halftone.is_serial else slab
                if apart:
                    write_apart(job, folder, journal, monitor, workers, scheduler, size)
                else:
                    writer = LayerWriter(source_of(job), Dealer(job), images, journal)
                    write_layers(writer, monitor, threads, size)
            finally:
                journal.close()
            provenance = Provenance(
                inputs=inputs,
                seed=job.seed,
                threads=threads,
                started_utc=started,
                finished_utc=utc_now(),
            )
            images.assemble(partial, monitor)
            write_manifest(partial, _manifest(job, digest, journal, provenance))
            images.tidy(partial)
            add_sums(partial, _known_sums(images, journal))
            publish(partial, folder)
        return read_stack(folder)


def _known_sums(images: ImageFiles, journal: Journal) -> dict[str, str]:
    """Path to SHA-256 of the image files, where these are not joined from pages."""
    if images.kind == "tiff pages":
        return {}
    return {
        name: sha256
        for record in journal.done.values()
        for name, sha256 in zip(images.names(record.layer), record.sha256, strict=True)
    }


def _check_counts(workers: int, threads: int | None, slab: int) -> None:
    if min(slab, workers, 1 if threads is None else threads) < 1:
        raise InputError(
            f"Workers, threads and slab are at least 1; got {workers}, {threads} and {slab}."
        )
    if workers > 1 and threads not in (None, 1):
        raise InputError(
            f"Each of several workers has one thread; got {workers} workers and {threads} threads."
        )


def _cores(threads: int | None) -> int:
    if threads is not None:
        return threads
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def _finished(folder: Path, job: str) -> Stack | None:
    """The stack in `folder` if it is whole and of this very job."""
    if not folder.is_dir() or not any(folder.iterdir()):
        return None
    try:
        stack = read_stack(folder)
        if stack.manifest["job"] != job:
            return None
        files = stack.files
        for channel in range(1 if stack.is_indexed else len(stack.channels)):
            for layer in range(stack.n_layers):
                if not files.is_intact(channel, layer, files.file_bytes(channel, layer)):
                    return None
    except FileFormatError:
        return None
    return stack


@contextmanager
def _disk_errors(partial: Path) -> Iterator[None]:
    """Turn what the operating system refuses into a `ResourceError` that says what is kept."""
    try:
        yield
    except OSError as error:
        raise ResourceError(
            f"The stack could not be written: {error.strerror or error}. The layers that are "
            f"finished stay in '{partial.name}'; make room (or mend what is named) and run the "
            "same command again, and it goes on from there."
        ) from error


def _manifest(
    job: PrintJob, digest: str, journal: Journal, provenance: Provenance
) -> dict[str, Any]:
    """The whole manifest of a stack whose layers are all written."""
    return {
        "format": FORMAT,
        "format_number": FORMAT_NUMBER,
        "job": digest,
        "parts": [
            {
                "name": p.name,
                "kind": p.kind,
                "digest": p.part.digest,
                "grid": p.part.grid.as_dict(),
                "raster": p.raster.as_dict(),
            }
            for p in job.parts
        ],
        "notes": job.notes,
        "profile": job.profile.as_dict(),
        "raster": job.window.as_dict(),
        "image": image_entry(job.window, job.profile),
        "method": job.method,
        **_images(job, journal),
        "inputs": dict(provenance.inputs),
        "provenance": provenance.as_dict(),
    }


def _images(job: PrintJob, journal: Journal) -> dict[str, Any]:
    """The manifest's ``channels``, and ``layer_sha256`` where files hold all channels."""
    records = [journal.done[k] for k in range(job.window.image_shape[0])]
    if job.profile.image.kind != "png index":
        return {"channels": _channel_entries(job, records, digests=True)}
    return {
        "channels": _channel_entries(job, records, digests=False),
        "layer_sha256": [r.sha256[0] for r in records],
    }


def _channel_entries(
    job: PrintJob, records: Sequence[LayerRecord], *, digests: bool
) -> list[dict[str, Any]]:
    """The manifest's ``channels`` entries; a resin's design volume is shared by its channels."""
    designed: dict[str, float] = {}
    density: dict[str, float | None] = {}
    for item in job.parts:
        for resin, volume in designed_volumes(item.part).items():
            designed[resin] = designed.get(resin, 0.0) + volume
        density.update({r.name: r.density.value for r in item.part.resins})
    sharing = Counter(job.channels.values())
    entries = []
    for m, name in enumerate(job.channel_names):
        is_support = name not in job.channels
        resin = job.channels.get(name, job.profile.channels[name] or "support")
        sites = sum(r.sites[m] for r in records)
        entries.append(
            {
                "name": name,
                "resin": resin,
                "role": "support" if is_support else "model",
                "sites": sites,
                "volume_mm3": float(sites * job.window.site_volume),
                "designed_mm3": None if is_support else designed[resin] / sharing[resin],
                "density_t_mm3": density.get(resin),
                "sha256": [r.sha256[m] for r in records] if digests else [],
            }
        )
    return entries

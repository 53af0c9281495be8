"""Write a part as a stack of one-bit images: streamed, resumable, published only when whole."""

from __future__ import annotations

import hashlib
import os
import threading
from collections.abc import Iterator, Mapping, Sequence
from concurrent.futures import FIRST_COMPLETED, Future, ThreadPoolExecutor, wait
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import Cancelled, FileFormatError, InputError, ResourceError
from voxelmat.io.png import encode_bitmap
from voxelmat.kernels.bitplane import count_planes, to_words
from voxelmat.model.part import Part
from voxelmat.model.profile import SUPPORT_POLICIES, PrintProfile
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.halftone import INTERFACE_RULE, Slicer, used_resins
from voxelmat.printing.journal import Journal, LayerRecord, locked, publish, refuse_foreign
from voxelmat.printing.manifest import FORMAT, image_entry, layer_name, write_manifest
from voxelmat.printing.mask import mask_digest
from voxelmat.printing.raster import Raster, place
from voxelmat.printing.readback import Stack, read_stack
from voxelmat.printing.support import outline_box, outline_field, outline_source
from voxelmat.provenance import Provenance, text_digest, utc_now, versions

__all__ = ["designed_volumes", "write_stack"]

_HALFTONE = "3-D blue noise by void-and-cluster, 64^3 sites, 16 bit, skewed tiles"
_ENCODER = "one-bit PNG, filter 0, deflate level 1"


def designed_volumes(part: Part) -> dict[str, float]:
    """Volume of each printed resin in the design, mm^3.

    A part with a signed distance but no occupancy is filled from that distance: a voxel whose
    centre lies on the outline counts half.
    """
    if part.occupancy is None and part.distance is not None:
        fill = np.clip(127.5 - 255 / 16 * part.distance.astype(np.float32), 0, 255)
        part = part.replace(occupancy=np.where(part.labels > 0, fill, 0).astype(np.uint8))
    printed = part.printed_labels()
    amount = (part.filled() * printed) @ part.palette_fractions() * part.grid.voxel_volume
    return {m.name: float(v) for m, v in zip(part.resins, amount, strict=True)}


def write_stack(
    part: Part,
    profile: PrintProfile,
    folder: str | Path,
    *,
    orientation: Sequence[str] = (),
    position: tuple[float, float] | None = None,
    support: str | None = None,
    seed: int = 0,
    monitor: Monitor = SILENT,
    resume: bool = True,
    inputs: Mapping[str, str] | None = None,
    threads: int | None = None,
    slab: int = 16,
) -> Stack:
    """Slice and halftone a part into one folder of one-bit PNG images a material channel.

    Parameters
    ----------
    part : Part
    profile : PrintProfile
    folder : str or Path
        Appears only when everything is written; until then work goes to ``<folder>.partial``.
        An earlier stack of this name is replaced then; any other content is refused.
    orientation : sequence of str
        Turns by multiples of 90 degrees about the tray's axes, in order: ``["x 90"]``.
    position : tuple of float, optional
        Low x and y corner of the part on the tray, mm; the middle of the tray if left out.
    support : {"columns", "machine", "none"}, optional
        The profile's policy if left out.
    seed : int
        Moves the start of the blue-noise mask.
    monitor : Monitor
    resume : bool
        Keep the layers that an interrupted run of the same job has finished; a finished stack
        of the same job is checked and returned as it is.
    inputs : mapping, optional
        Names of input files and their SHA-256, for the manifest.
    threads, slab : int
        Workers (all cores if left out) and layers a unit of work. Neither changes a bit.

    Returns
    -------
    Stack

    Raises
    ------
    InputError
        If the part does not fit the tray or the channels, or an option is not known.
    ResourceError
        If the disk is full, another run writes to the folder, or it holds other files. Finished
        layers are kept for the next run; nothing appears under `folder`.
    Cancelled
        From the monitor; finished layers are kept.
    """
    folder = Path(folder).absolute()
    policy = profile.support_policy if support is None else support
    if policy not in SUPPORT_POLICIES:
        raise InputError(
            f"The support policy is one of {', '.join(SUPPORT_POLICIES)}; got {policy!r}."
        )
    if policy == "columns" and not profile.support_channel:
        raise InputError(f"Profile '{profile.name}' has no support channel to lay columns with.")
    if not folder.name:
        raise InputError(f"'{folder}' cannot be the folder of a stack; name a new one.")
    if not isinstance(seed, int) or not 0 <= seed < 2**64:
        raise InputError(f"A seed is a whole number of 0 to 2^64 - 1; got {seed!r}.", key="seed")
    if slab < 1 or (threads is not None and threads < 1):
        raise InputError(f"Threads and slab are at least 1; got {threads} and {slab}.")
    started = utc_now()
    raster = place(outline_box(part, outline_field(part)), profile, orientation, position)
    channels = profile.assign(used_resins(part))
    method = {
        "outline": outline_source(part),
        "halftone": _HALFTONE,
        "mask_sha256": mask_digest(),
        "seed": seed,
        "interfaces": INTERFACE_RULE,
        "support": policy,
        "encoder": _ENCODER,
    }
    job = _job_digest(part, profile, raster, channels, method)
    names = [*channels, *([profile.support_channel] if policy == "columns" else [])]
    with locked(folder):
        refuse_foreign(folder)
        finished = _finished(folder, job) if resume else None
        if finished is not None:
            return finished
        slicer = Slicer(
            part, raster, tuple(channels.values()), support=policy == "columns", seed=seed
        )
        partial = folder.with_name(f"{folder.name}.partial")
        with _disk_errors(partial):
            journal = Journal(partial, job, names, resume=resume)
            try:
                inverted = profile.polarity == "black is material"
                work = _Work(slicer, journal, names, inverted)
                _run(work, monitor, _workers(threads), slab)
            finally:
                journal.close()
            provenance = Provenance(
                inputs=dict(inputs or {}), seed=seed, threads=_workers(threads),
                started_utc=started, finished_utc=utc_now(),
            )  # fmt: skip
            write_manifest(
                partial,
                {
                    "format": FORMAT,
                    "format_number": 1,
                    "job": job,
                    "part": {
                        "name": part.name, "digest": part.digest, "grid": part.grid.as_dict()
                    },
                    "profile": profile.as_dict(),
                    "raster": raster.as_dict(),
                    "image": image_entry(raster, profile.polarity),
                    "method": method,
                    "channels": _channel_entries(part, profile, raster, channels, names, journal),
                    "inputs": dict(inputs or {}),
                    "provenance": provenance.as_dict(),
                },
            )  # fmt: skip
            publish(partial, folder)
        return read_stack(folder)


def _workers(threads: int | None) -> int:
    if threads is not None:
        return threads
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def _job_digest(
    part: Part,
    profile: PrintProfile,
    raster: Raster,
    channels: Mapping[str, str],
    method: Mapping[str, Any],
) -> str:
    """Digest of everything that decides the bytes of the images."""
    return text_digest(
        {
            "part": part.digest,
            "profile": profile.as_dict(),
            "raster": raster.as_dict(),
            "channels": list(channels.items()),
            "method": dict(method),
            "versions": {k: v for k, v in versions().items() if k in ("voxelmat", "isal")},
        }
    )


def _finished(folder: Path, job: str) -> Stack | None:
    """The stack in `folder` if it is whole and of this very job."""
    if not folder.is_dir() or not any(folder.iterdir()):
        return None
    try:
        stack = read_stack(folder)
        if stack.manifest["job"] != job:
            return None
        for channel in range(len(stack.channels)):
            for layer in range(stack.n_layers):
                if not stack.is_intact(channel, layer, stack.file_bytes(channel, layer)):
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


class _Work:
    """Writes slabs of layers; one object is shared by all threads."""

    def __init__(
        self, slicer: Slicer, journal: Journal, names: Sequence[str], inverted: bool
    ) -> None:
        self.slicer = slicer
        self.journal = journal
        self.stop = threading.Event()
        self._folders = [journal.partial / n for n in names]
        self._inverted = inverted
        self._width = slicer.raster.image_shape[2]
        self._ppm = slicer.raster.pixels_per_metre

    def slab(self, first: int, last: int) -> None:
        """Write the layers ``first`` to ``last - 1``."""
        for layer, bits in enumerate(self.slicer.layers(first, last), start=first):
            if self.stop.is_set():
                return
            sites = _count(bits)
            image = ~bits if self._inverted else bits
            digests = []
            for plane, folder in zip(image, self._folders, strict=True):
                data = encode_bitmap(plane, self._width, self._ppm)
                (folder / layer_name(layer)).write_bytes(data)
                digests.append(hashlib.sha256(data).hexdigest())
            self.journal.add(LayerRecord(layer, tuple(digests), tuple(sites)))


def _count(bits: NDArray[np.uint8]) -> list[int]:
    """Set bits of each channel."""
    count = np.zeros(len(bits), dtype=np.int64)
    words = np.empty((bits.shape[1], (bits.shape[2] + 7) // 8), dtype=np.uint64)
    for channel, plane in enumerate(bits):
        to_words(plane, words)
        count_planes(words[None], count[channel : channel + 1])
    return [int(c) for c in count]


def _missing_slabs(work: _Work, size: int) -> list[tuple[int, int]]:
    """Runs of layers that are still to be written, cut to `size`."""
    slabs: list[tuple[int, int]] = []
    for layer in range(work.slicer.raster.image_shape[0]):
        if layer in work.journal.done:
            continue
        if slabs and slabs[-1][1] == layer and layer - slabs[-1][0] < size:
            slabs[-1] = (slabs[-1][0], layer + 1)
        else:
            slabs.append((layer, layer + 1))
    return slabs


def _run(work: _Work, monitor: Monitor, threads: int, size: int) -> None:
    """Write all missing layers; on any error or cancel, stop at whole layers and pass it on."""
    total = work.slicer.raster.image_shape[0]
    stage = "writing layers"
    monitor.report(stage, done=len(work.journal.done), total=total)
    pool = ThreadPoolExecutor(threads, thread_name_prefix="voxelmat-slice")
    try:
        open_: set[Future[None]] = {
            pool.submit(work.slab, a, b) for a, b in _missing_slabs(work, size)
        }
        while open_:
            finished, open_ = wait(open_, timeout=0.25, return_when=FIRST_COMPLETED)
            for future in finished:
                future.result()
            monitor.report(stage, done=len(work.journal.done), total=total)
    finally:
        work.stop.set()
        pool.shutdown(wait=True, cancel_futures=True)
    if len(work.journal.done) != total:
        raise Cancelled(f"Stopped with {len(work.journal.done)} of {total} layers written.")


def _channel_entries(
    part: Part,
    profile: PrintProfile,
    raster: Raster,
    channels: Mapping[str, str],
    names: Sequence[str],
    journal: Journal,
) -> list[dict[str, Any]]:
    """The manifest's ``channels`` entries."""
    designed = designed_volumes(part)
    records = [journal.done[k] for k in range(raster.image_shape[0])]
    entries = []
    for m, name in enumerate(names):
        resin = channels.get(name, profile.channels[name] or "support")
        is_support = name not in channels
        known = any(r.name == resin for r in part.resins)
        sites = sum(r.sites[m] for r in records)
        entries.append(
            {
                "name": name,
                "resin": resin,
                "role": "support" if is_support else "model",
                "sites": sites,
                "volume_mm3": float(sites * raster.site_volume),
                "designed_mm3": None if is_support else designed[resin],
                "density_t_mm3": part.resin(resin).density.value if known else None,
                "sha256": [r.sha256[m] for r in records],
            }
        )
    return entries

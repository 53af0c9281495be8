"""Write a part as a stack of one-bit images: streamed, resumable, published only when whole."""

from __future__ import annotations

import os
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from scipy import ndimage

from voxelmat.errors import FileFormatError, InputError, ResourceError
from voxelmat.model.part import Part
from voxelmat.model.profile import SUPPORT_POLICIES, PrintProfile
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.halftone import INTERFACE_RULE, Slicer, used_resins
from voxelmat.printing.journal import Journal, locked, publish, refuse_foreign, retired
from voxelmat.printing.manifest import FORMAT, image_entry, write_manifest
from voxelmat.printing.mask import mask_digest
from voxelmat.printing.place import place
from voxelmat.printing.raster import Raster
from voxelmat.printing.readback import Stack, read_stack
from voxelmat.printing.support import outline_box, outline_field, outline_source
from voxelmat.printing.writer import LayerWriter, write_layers
from voxelmat.provenance import Provenance, text_digest, utc_now, versions

__all__ = ["designed_volumes", "write_stack"]

_HALFTONE = "3-D blue noise by void-and-cluster, 64^3 sites, 16 bit, skewed tiles"
_ENCODER = "one-bit PNG, filter 0, deflate level 1"


def designed_volumes(part: Part) -> dict[str, float]:
    """Volume of each printed resin in the design, mm^3.

    The solid fraction of the voxels counts, except where only the signed distance knows what is
    printed: where there is no fraction, and round bought-in bodies, whose clearance is cut out
    of voxels that are else full. There a voxel whose centre lies on the outline counts half.
    """
    printed = part.printed_labels()
    if part.distance is not None:
        cut = np.clip(127.5 - 255 / 16 * part.distance.astype(np.float32), 0, 255)
        fill = cut if part.occupancy is None else part.occupancy.astype(np.float32)
        bought = ~printed[part.labels] & (part.labels > 0)
        if bought.any():
            near = ndimage.binary_dilation(bought, iterations=2)
            fill = np.where(near, np.minimum(fill, cut), fill)
        fill = np.where(part.labels > 0, np.rint(fill), 0)
        part = part.replace(occupancy=fill.astype(np.uint8))
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
        An earlier stack of this name is replaced then; any other content is refused. A lock
        file ``.<folder>.lock`` stays beside it.
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
    if not folder.name:
        raise InputError(f"'{folder}' cannot be the folder of a stack; name a new one.")
    if slab < 1 or (threads is not None and threads < 1):
        raise InputError(f"Threads and slab are at least 1; got {threads} and {slab}.")
    started = utc_now()
    job = _plan(part, profile, orientation, position, support, seed, dict(inputs or {}))
    workers = _workers(threads)
    with locked(folder):
        for target in (folder, retired(folder)):
            refuse_foreign(target)
        finished = _finished(folder, job.digest) if resume else None
        if finished is not None:
            return finished
        slicer = Slicer(
            part, job.raster, tuple(job.channels.values()), support=job.draws_support, seed=seed
        )
        partial = folder.with_name(f"{folder.name}.partial")
        with _disk_errors(partial):
            journal = Journal(partial, job.digest, job.folders, resume=resume)
            try:
                inverted = profile.polarity == "black is material"
                writer = LayerWriter(slicer, journal, job.folders, inverted)
                write_layers(writer, monitor, workers, slab)
            finally:
                journal.close()
            provenance = Provenance(
                inputs=job.inputs,
                seed=seed,
                threads=workers,
                started_utc=started,
                finished_utc=utc_now(),
            )
            write_manifest(partial, _manifest(job, journal, provenance))
            publish(partial, folder)
        return read_stack(folder)


@dataclass(frozen=True, slots=True, kw_only=True)
class _Job:
    """Everything that decides the images, checked before anything is written."""

    part: Part
    profile: PrintProfile
    raster: Raster
    channels: dict[str, str]
    method: dict[str, Any]
    inputs: dict[str, str]

    @property
    def draws_support(self) -> bool:
        return bool(self.method["support"] == "columns")

    @property
    def folders(self) -> list[str]:
        """Channel names in the order of the slicer's materials, support last."""
        return [*self.channels, *([self.profile.support_channel] if self.draws_support else [])]

    @property
    def digest(self) -> str:
        """SHA-256 over all of it and over the versions that the bytes depend on."""
        return text_digest(
            {
                "part": self.part.digest,
                "profile": self.profile.as_dict(),
                "raster": self.raster.as_dict(),
                "channels": list(self.channels.items()),
                "method": self.method,
                "inputs": self.inputs,
                "versions": {k: v for k, v in versions().items() if k in ("voxelmat", "isal")},
            }
        )


def _plan(
    part: Part,
    profile: PrintProfile,
    orientation: Sequence[str],
    position: tuple[float, float] | None,
    support: str | None,
    seed: int,
    inputs: dict[str, str],
) -> _Job:
    """Place the part, assign the channels, and note the method; refuse what cannot be."""
    policy = profile.support_policy if support is None else support
    if policy not in SUPPORT_POLICIES:
        raise InputError(
            f"The support policy is one of {', '.join(SUPPORT_POLICIES)}; got {policy!r}.",
            key="support",
        )
    if policy == "columns" and not profile.support_channel:
        raise InputError(
            f"Profile '{profile.name}' has no support channel to lay columns with.", key="support"
        )
    if not isinstance(seed, int) or not 0 <= seed < 2**64:
        raise InputError(f"A seed is a whole number of 0 to 2^64 - 1; got {seed!r}.", key="seed")
    return _Job(
        part=part,
        profile=profile,
        raster=place(outline_box(part, outline_field(part)), profile, orientation, position),
        channels=profile.assign(used_resins(part)),
        method={
            "outline": outline_source(part),
            "halftone": _HALFTONE,
            "mask_sha256": mask_digest(),
            "seed": seed,
            "interfaces": INTERFACE_RULE,
            "support": policy,
            "encoder": _ENCODER,
        },
        inputs=inputs,
    )


def _workers(threads: int | None) -> int:
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


def _manifest(job: _Job, journal: Journal, provenance: Provenance) -> dict[str, Any]:
    """The whole manifest of a stack whose layers are all written."""
    part = job.part
    return {
        "format": FORMAT,
        "format_number": 1,
        "job": job.digest,
        "part": {"name": part.name, "digest": part.digest, "grid": part.grid.as_dict()},
        "profile": job.profile.as_dict(),
        "raster": job.raster.as_dict(),
        "image": image_entry(job.raster, job.profile.polarity),
        "method": job.method,
        "channels": _channel_entries(job, journal),
        "inputs": job.inputs,
        "provenance": provenance.as_dict(),
    }


def _channel_entries(job: _Job, journal: Journal) -> list[dict[str, Any]]:
    """The manifest's ``channels`` entries."""
    designed = designed_volumes(job.part)
    density = {r.name: r.density.value for r in job.part.resins}
    records = [journal.done[k] for k in range(job.raster.image_shape[0])]
    entries = []
    for m, name in enumerate(job.folders):
        is_support = name not in job.channels
        resin = job.channels.get(name, job.profile.channels[name] or "support")
        sites = sum(r.sites[m] for r in records)
        entries.append(
            {
                "name": name,
                "resin": resin,
                "role": "support" if is_support else "model",
                "sites": sites,
                "volume_mm3": float(sites * job.raster.site_volume),
                "designed_mm3": None if is_support else designed[resin],
                "density_t_mm3": density.get(resin),
                "sha256": [r.sha256[m] for r in records],
            }
        )
    return entries

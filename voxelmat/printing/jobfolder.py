"""A print job as a folder, so that worker processes on this or other machines can take part.

The folder holds ``job.json``, a part store for every part that was in memory, and the support
fields. Nothing large travels between processes.
"""

from __future__ import annotations

import json
import shutil
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from voxelmat.errors import FileFormatError, ResourceError, VoxelmatError
from voxelmat.io.atomic import write_json
from voxelmat.io.bigpart import StoredPart, open_big_part
from voxelmat.io.bigpart_write import save_big_part
from voxelmat.model.halftone import Halftone
from voxelmat.model.profile import PrintProfile
from voxelmat.printing.job import PlacedPart, PrintJob
from voxelmat.printing.raster import Raster
from voxelmat.provenance import versions

__all__ = ["JOB_FILE", "described", "job_folder", "load_job"]

JOB_FILE = "job.json"
_FORMAT = "voxelmat-print-job"
_OURS = ("job.json", "part-", "support-", "slab-")  # how the names in such a folder begin
_BYTES_DEPEND_ON = ("voxelmat", "numpy", "numba", "isal")


def job_folder(folder: Path) -> Path:
    """Where the job that writes the stack `folder` is described."""
    return folder.with_name(f".{folder.name}.job")


@contextmanager
def described(job: PrintJob, folder: Path) -> Iterator[Path]:
    """Describe `job` in `job_folder` while the block runs; the caller holds the stack's lock.

    The disappearance of ``job.json`` tells workers to stop, also those of an earlier run.
    """
    place = job_folder(folder)
    _remove(place)
    try:
        place.mkdir()
        stores: dict[int, Path] = {}
        for item in job.parts:  # copies share a part
            part, key = item.part, id(item.part)
            if isinstance(part, StoredPart):
                stores[key] = part.folder
            elif key not in stores:
                stores[key] = place / f"part-{len(stores)}"
                save_big_part(part, stores[key], kind="maps")
        write_json(place / JOB_FILE, _as_dict(job, stores))
        yield place
    finally:
        _remove(place)


def _remove(place: Path) -> None:
    """Delete a job's folder, but nothing that is not one."""
    if place.is_dir():
        foreign = [p.name for p in place.iterdir() if not p.name.lstrip(".").startswith(_OURS)]
        if foreign:
            raise ResourceError(
                f"'{place.name}' holds files that are not a job of ours ({foreign[0]}). Nothing "
                "was changed; move them away."
            )
        (place / JOB_FILE).unlink(missing_ok=True)
        shutil.rmtree(place)


def _as_dict(job: PrintJob, stores: Mapping[int, Path]) -> dict[str, Any]:
    return {
        "format": _FORMAT,
        "versions": {k: v for k, v in versions().items() if k in _BYTES_DEPEND_ON},
        "profile": job.profile.as_dict(),
        "window": job.window.as_dict(),
        "channels": list(job.channels.items()),
        "support": job.support,
        "seed": job.seed,
        "halftone": job.halftone.as_dict(),
        "parts": [
            {
                "name": p.name,
                "kind": p.kind,
                "raster": p.raster.as_dict(),
                "store": str(stores[id(p.part)]),
            }
            for p in job.parts
        ],
    }


def load_job(place: Path) -> PrintJob:
    """The job that is described in a folder, its parts streamed from their stores.

    Raises
    ------
    FileFormatError
        Where the folder or a store cannot be seen from here, or other versions of the packages
        that decide the bytes are installed here.
    """
    try:
        data = json.loads((place / JOB_FILE).read_text("utf-8"))
        if data["format"] != _FORMAT:
            raise FileFormatError("not a print job")
        here = {k: v for k, v in versions().items() if k in data["versions"]}
        if here != data["versions"]:
            raise FileFormatError(
                f"it was described with {data['versions']}; installed here are {here}"
            )
        stores = {p["store"]: open_big_part(p["store"], verify=False) for p in data["parts"]}
        return PrintJob(
            profile=PrintProfile.from_dict(data["profile"]),
            parts=tuple(
                PlacedPart(
                    part=stores[p["store"]],
                    raster=Raster.from_dict(p["raster"]),
                    name=p["name"],
                    kind=p["kind"],
                )
                for p in data["parts"]
            ),
            window=Raster.from_dict(data["window"]),
            channels=dict(data["channels"]),
            support=data["support"],
            seed=data["seed"],
            halftone=_halftone(data["halftone"]),
        )
    except (OSError, VoxelmatError, LookupError, TypeError, ValueError) as error:
        raise FileFormatError(
            f"A worker cannot take part in the job described in '{place.name}': {error}. Workers "
            "need the same versions as this process and must see its folders under the same paths."
        ) from error


def _halftone(data: Mapping[str, Any]) -> Halftone:
    order, widths = data["order"], data["interface_width_mm"]
    if isinstance(widths, dict):
        widths = {tuple(pair.split(" | ")): width for pair, width in widths.items()}
    return Halftone(
        method=data["method"],
        order=order if isinstance(order, str) else tuple(order),
        interface_width_mm=widths,
    )

"""A proof print: a box cut from the rasters of a stack, bit for bit, as a stack of its own."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from voxelmat.errors import InputError
from voxelmat.io.atomic import explain_os_error
from voxelmat.model.finding import SEVERITIES, Finding
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.crop import Crop, proof_crop
from voxelmat.printing.imagefiles import ImageFiles
from voxelmat.printing.journal import Journal, locked, publish, refuse_foreign
from voxelmat.printing.manifest import image_entry, write_manifest
from voxelmat.printing.readback import Stack, read_stack
from voxelmat.printing.sums import add_sums
from voxelmat.provenance import Provenance, text_digest, utc_now

__all__ = ["worst_place", "write_proof"]


def worst_place(findings: list[Finding]) -> Finding | None:
    """The worst finding that has a place, if any."""
    placed = [f for f in findings if f.place_mm is not None]
    return min(placed, key=lambda f: SEVERITIES.index(f.severity), default=None)


def write_proof(
    stack: Stack,
    folder: str | Path,
    crop: Crop | None = None,
    *,
    monitor: Monitor = SILENT,
) -> Stack:
    """Write a proof print.

    Parameters
    ----------
    stack : Stack
        What it is cut from; every file that is read is compared with its SHA-256.
    folder : str or Path
        Of the proof print; an earlier stack of this name is replaced.
    crop : Crop, optional
        As `voxelmat.printing.crop.proof_crop` chooses it: the first 3 mm if left out.

    Returns
    -------
    Stack
        Its images hold the very bits of `stack` inside the crop. It states no design volumes,
        for those of the cut are not known.

    Raises
    ------
    InputError
        If the folder is that of the stack or inside it, or if no part lies in the crop.
    FileFormatError
        If a layer of the stack cannot be trusted.
    ResourceError
        If the disk refuses, or the folder holds other files.
    """
    folder = Path(folder).absolute()
    source = stack.folder.absolute()
    if folder == source or source in folder.parents:
        raise InputError("A proof print needs a folder of its own, outside that of the stack.")
    box = proof_crop(stack) if crop is None else crop
    started = utc_now()
    window = box.window(stack.raster)
    parts = box.parts(stack)
    cut = {"layers": list(box.layers), "rows": list(box.rows), "columns": list(box.columns)}
    digest = text_digest({"proof of": stack.manifest["job"], **cut})
    images = ImageFiles(window, [c.name for c in stack.channels], stack.profile)
    with locked(folder):
        refuse_foreign(folder)
        partial = folder.with_name(f"{folder.name}.partial")
        try:
            journal = Journal(partial, digest, images.folders, images.names, resume=False)
            try:
                _write(stack, box, images, journal, monitor)
            finally:
                journal.close()
            images.assemble(partial, monitor)
            data = {
                **stack.manifest,
                "job": digest,
                "parts": parts,
                "notes": {
                    **stack.manifest["notes"],
                    "proof_of": stack.manifest["job"],
                    "crop": cut,
                    "crop_words": box.why,
                },
                "raster": window.as_dict(),
                "image": image_entry(window, stack.profile),
                **_images(stack, images, journal),
                "provenance": _provenance(stack, started),
            }
            write_manifest(partial, data)
            images.tidy(partial)
            add_sums(partial)
            publish(partial, folder)
        except OSError as error:
            raise explain_os_error(partial, error) from error
    return read_stack(folder)


def _write(stack: Stack, box: Crop, images: ImageFiles, journal: Journal, monitor: Monitor) -> None:
    first, last = box.layers
    for k in range(first, last):
        bits = box.cut(stack.bits(k))
        journal.add(images.write(journal.partial, k - first, bits))
        monitor.report("writing the proof print", done=k + 1 - first, total=last - first)


def _images(stack: Stack, images: ImageFiles, journal: Journal) -> dict[str, Any]:
    """The manifest's ``channels``, and ``layer_sha256`` where files hold all channels."""
    records = [journal.done[k] for k in range(images.n_layers)]
    site = float(stack.raster.site_volume)
    channels = []
    for m, entry in enumerate(stack.manifest["channels"]):
        sites = sum(r.sites[m] for r in records)
        digests = [] if stack.is_indexed else [r.sha256[m] for r in records]
        channels.append(
            {
                **entry,
                "sites": sites,
                "volume_mm3": sites * site,
                "designed_mm3": None,
                "sha256": digests,
            }
        )
    if not stack.is_indexed:
        return {"channels": channels}
    return {"channels": channels, "layer_sha256": [r.sha256[0] for r in records]}


def _provenance(stack: Stack, started: str) -> dict[str, Any]:
    return Provenance(
        inputs=dict(stack.manifest["inputs"]),
        seed=int(stack.manifest["method"]["seed"]),
        threads=1,
        started_utc=started,
        finished_utc=utc_now(),
    ).as_dict()

"""Fill a part store slab by slab along z: atomic, resumable, never whole in memory."""

from __future__ import annotations

import json
import shutil
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError, ResourceError
from voxelmat.io.atomic import explain_os_error, write_json, write_text
from voxelmat.io.bigpart import (
    ARRAYS,
    FORMAT,
    HEAD,
    StoredArray,
    StoredPart,
    head_digest,
    open_big_part,
    require_kind,
    slab_digest,
)
from voxelmat.model.blend import Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.material import Material
from voxelmat.model.part import Part
from voxelmat.monitor import SILENT, Monitor

__all__ = ["SLAB", "SlabMaker", "fill_big_part", "save_big_part"]

#: Planes along z that are made, hashed and stored together.
SLAB = 4
_CHUNK = 128  # voxels of a chunk along x and y
_SHARD = 8  # chunks of a shard along x and y
_JOURNAL = "journal.jsonl"

#: ``make(first, last)`` gives the planes ``first`` to ``last - 1`` along z of each array by its
#: name (``labels``, ``distance``, ``occupancy``), indexed ``[i, j, k]``.
SlabMaker = Callable[[int, int], dict[str, NDArray[Any]]]


def fill_big_part(
    folder: str | Path,
    make: SlabMaker,
    *,
    grid: VoxelGrid,
    resins: Sequence[Material],
    palette: Sequence[Blend],
    arrays: Sequence[str] = ("labels", "distance"),
    source: str = "",
    name: str = "part",
    kind: str = "zarr",
    monitor: Monitor = SILENT,
    resume: bool = True,
) -> StoredPart:
    """Make a stored part from a function that gives it slab by slab.

    Parameters
    ----------
    folder : str or Path
        Appears when everything is written; until then work goes to ``<folder>.partial``. It
        must not exist.
    make : callable
        See `SlabMaker`; called once a slab, in order, and only for slabs still missing. The
        same planes must come out whenever it is called.
    grid : VoxelGrid
    resins, palette : sequence
        As of a `Part`.
    arrays : sequence of str
        Which arrays `make` gives; ``labels`` always.
    source : str
        Says what `make` makes, for example a digest; an interrupted run is only taken up by
        one of the same source.
    name : str
    kind : {"zarr", "maps"}
        Compressed chunks, or plain ``.npy`` files that are memory-mapped.
    monitor : Monitor
    resume : bool

    Raises
    ------
    InputError
        Where `make` gives other arrays than it should, or a label past the palette.
    ResourceError
        Where the disk refuses, or the folder exists or is being written; what is finished
        stays for the next run.
    """
    import filelock

    folder = Path(folder).absolute()
    require_kind(kind)
    if "labels" not in arrays or not set(arrays) <= set(ARRAYS):
        raise InputError(f"A part has labels and may have {list(ARRAYS)[1:]}; got {list(arrays)}.")
    if folder.exists():
        raise ResourceError(f"'{folder.name}' exists already; choose another name or remove it.")
    head: dict[str, Any] = {
        "format": FORMAT,
        "format_number": 1,
        "kind": kind,
        "name": name,
        "source": source,
        "grid": grid.as_dict(),
        "palette": [list(b.fractions) for b in palette],
        "resins": [m.as_dict() for m in resins],
        "slab": SLAB,
        "arrays": list(arrays),
    }
    # A part of one voxel checks palette and resins.
    Part(
        grid=VoxelGrid(shape=(1, 1, 1), spacing=grid.spacing),
        resins=tuple(resins),
        palette=tuple(palette),
        labels=np.zeros((1, 1, 1), np.uint16),
    )
    try:
        folder.parent.mkdir(parents=True, exist_ok=True)
        with filelock.FileLock(folder.parent / f".{folder.name}.lock", timeout=0):
            return _filled(folder, make, head, grid, monitor, resume)
    except filelock.Timeout:
        raise ResourceError(
            f"Another run is filling '{folder.name}' at this moment; wait for it to end."
        ) from None
    except OSError as error:
        raise explain_os_error(folder, error) from error


def save_big_part(
    part: Part, folder: str | Path, *, kind: str = "zarr", monitor: Monitor = SILENT
) -> StoredPart:
    """Write a part to a store; bodies and blend law, which slicing does not need, are left out."""
    arrays = [n for n in ARRAYS if getattr(part, n) is not None]
    return fill_big_part(
        folder,
        lambda first, last: {n: getattr(part, n)[:, :, first:last] for n in arrays},
        grid=part.grid,
        resins=part.resins,
        palette=part.palette,
        arrays=arrays,
        source=part.digest,
        name=part.name,
        kind=kind,
        monitor=monitor,
    )


def _filled(
    folder: Path,
    make: SlabMaker,
    head: dict[str, Any],
    grid: VoxelGrid,
    monitor: Monitor,
    resume: bool,
) -> StoredPart:
    """Fill ``<folder>.partial``, write the head, and give it its name."""
    partial = folder.with_name(f"{folder.name}.partial")
    store = {n: StoredArray(partial, n, head["kind"], grid.shape) for n in head["arrays"]}
    done = _surviving(partial, head, store) if resume else {}
    if not done:
        _start(partial, head, store)
    _write_journal(partial, head, done)
    total = -(-grid.shape[2] // SLAB)
    with (partial / _JOURNAL).open("a", encoding="utf-8") as journal:
        for n in range(total):
            monitor.report("filling the part store", done=n, total=total)
            if n in done:
                continue
            first, last = n * SLAB, min((n + 1) * SLAB, grid.shape[2])
            blocks = _checked(make(first, last), head, (*grid.shape[:2], last - first))
            for name, block in blocks.items():
                target = store[name].open(write=True)
                target[first:last] = block.T
                if isinstance(target, np.memmap):
                    target.flush()
            done[n] = {name: slab_digest(block) for name, block in blocks.items()}
            journal.write(json.dumps({"slab": n, "sha256": done[n]}) + "\n")
            journal.flush()
    finished = dict(head)
    finished["arrays"] = {name: [done[n][name] for n in range(total)] for name in store}
    finished["digest"] = head_digest(finished)
    write_json(partial / HEAD, finished)
    (partial / _JOURNAL).unlink()
    partial.rename(folder)
    monitor.report("filling the part store", done=total, total=total)
    return open_big_part(folder, verify=False)


def _write_journal(partial: Path, head: dict[str, Any], done: dict[int, dict[str, str]]) -> None:
    """Head and finished slabs, without the line that was being written when a run stopped."""
    lines = [head, *({"slab": n, "sha256": digests} for n, digests in done.items())]
    write_text(partial / _JOURNAL, "".join(json.dumps(line) + "\n" for line in lines))


def _start(partial: Path, head: dict[str, Any], store: dict[str, StoredArray]) -> None:
    """An empty store of our own, in place of an older one that cannot be taken up."""
    if partial.exists():
        if not (partial / _JOURNAL).is_file():
            raise ResourceError(
                f"'{partial.name}' exists and is not an unfinished part store; remove it."
            )
        shutil.rmtree(partial)
    partial.mkdir()
    _write_journal(partial, head, {})
    for name, array in store.items():
        shape = array.shape[::-1]
        if array.kind == "zarr":
            _create_zarr(partial / f"{name}.zarr", shape, ARRAYS[name])
        else:
            np.lib.format.open_memmap(
                partial / f"{name}.npy", mode="w+", dtype=ARRAYS[name], shape=shape
            )


def _create_zarr(path: Path, shape: tuple[int, ...], dtype: type) -> None:
    import zarr
    from zarr.codecs import Crc32cCodec, ZstdCodec

    chunk = (min(SLAB, shape[0]), min(_CHUNK, shape[1]), min(_CHUNK, shape[2]))
    count = [min(_SHARD, -(-n // c)) for n, c in zip(shape[1:], chunk[1:], strict=True)]
    zarr.create_array(
        path,
        shape=shape,
        dtype=dtype,
        chunks=chunk,
        shards=(chunk[0], chunk[1] * count[0], chunk[2] * count[1]),
        compressors=(ZstdCodec(level=1), Crc32cCodec()),
        fill_value=0,
        dimension_names=("z", "y", "x"),
        zarr_format=3,
        # A chunk that is all zero is written too: one that went missing is then found.
        config={"write_empty_chunks": True},
    )


def _surviving(
    partial: Path, head: dict[str, Any], store: dict[str, StoredArray]
) -> dict[int, dict[str, str]]:
    """Slabs of an earlier run of the same job that still have their digest."""
    found: dict[int, dict[str, str]] = {}
    try:
        lines = (partial / _JOURNAL).read_text("utf-8").splitlines()
        if not lines or lines[0] != json.dumps(head):
            return found
    except (OSError, ValueError):
        return found
    for line in lines[1:]:
        try:
            entry = json.loads(line)
            n, wanted = int(entry["slab"]), dict(entry["sha256"])
            planes = slice(n * SLAB, (n + 1) * SLAB)
            if all(slab_digest(a[:, :, planes]) == wanted[m] for m, a in store.items()):
                found[n] = wanted
        except (ValueError, KeyError, TypeError):  # the line that was being written, or damage
            continue
    return found


def _checked(
    blocks: dict[str, NDArray[Any]], head: dict[str, Any], shape: tuple[int, int, int]
) -> dict[str, NDArray[Any]]:
    """What `make` gave, if it is what was asked for."""
    if sorted(blocks) != sorted(head["arrays"]):
        raise InputError(f"A slab has {sorted(blocks)}; {sorted(head['arrays'])} were announced.")
    for name, block in blocks.items():
        if block.shape != shape or block.dtype != ARRAYS[name]:
            raise InputError(
                f"A slab of '{name}' has shape {block.shape} and type {block.dtype}; it must have "
                f"{shape} and {np.dtype(ARRAYS[name])}."
            )
    labels = blocks["labels"]
    top = int(labels.max(initial=0))
    if top >= len(head["palette"]):
        raise InputError(
            f"Label {top} points past the palette, which has {len(head['palette'])} entries."
        )
    if "occupancy" in blocks and bool(np.any((blocks["occupancy"] > 0) & (labels == 0))):
        raise InputError("Some voxels have an occupancy above 0 but no label.")
    return blocks

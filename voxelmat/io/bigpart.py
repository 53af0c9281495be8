"""A part larger than memory: a folder of arrays, chunked (Zarr v3) or mapped, read by blocks.

The folder holds ``part.json`` (grid, palette, resins, SHA-256 of every slab of planes along z)
and one array each for labels, signed distance and occupancy, stored ``[z, y, x]``.
`voxelmat.io.bigpart_write` makes such folders.
"""

from __future__ import annotations

import hashlib
import json
import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import FileFormatError, InputError, VoxelmatError
from voxelmat.io.store import material_of
from voxelmat.model.blend import Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.laws import BlendLaw, LogMix
from voxelmat.model.material import Material
from voxelmat.model.part import Part
from voxelmat.provenance import text_digest

__all__ = [
    "ARRAYS",
    "FORMAT",
    "HEAD",
    "KINDS",
    "AnyPart",
    "StoredArray",
    "StoredPart",
    "head_digest",
    "open_big_part",
    "require_kind",
    "slab_digest",
    "z_slabs",
]

HEAD = "part.json"
FORMAT = "voxelmat-part-store"
#: How the arrays are kept: Zarr v3 with zstd and a checksum a chunk, or raw ``.npy`` maps.
KINDS = ("zarr", "maps")
#: Arrays of a part and their types.
ARRAYS: Mapping[str, type] = {"labels": np.uint16, "distance": np.int8, "occupancy": np.uint8}
_WRONG_HEAD = (
    VoxelmatError, LookupError, TypeError, ValueError, ArithmeticError, AttributeError
)  # fmt: skip
_LARGEST_HEAD = 64 << 20  # bytes


@dataclass(frozen=True, slots=True)
class StoredArray:
    """One array of a stored part; an index of three slices reads that block from the disk.

    Attributes
    ----------
    folder : Path
    name : str
        One of `ARRAYS`.
    kind : str
        One of `KINDS`.
    shape : tuple of int
        Along x, y, z.
    """

    folder: Path
    name: str
    kind: str
    shape: tuple[int, int, int]

    def open(self, *, write: bool = False) -> Any:
        """The array on the disk, ``[z, y, x]``: a Zarr array or a memory map."""
        mode: Any = "r+" if write else "r"
        if self.kind == "zarr":
            import zarr

            return zarr.open_array(self.folder / f"{self.name}.zarr", mode=mode)
        return np.load(self.folder / f"{self.name}.npy", mmap_mode=mode, allow_pickle=False)

    def __getitem__(self, index: tuple[slice, slice, slice]) -> NDArray[Any]:
        """Read a block ``[i, j, k]``, x fastest in memory.

        Opened anew each time: a map that stays open would count as memory of this process.

        Raises
        ------
        FileFormatError
            Where the block cannot be read or a chunk fails its checksum.
        """
        try:
            block = self._read(tuple(reversed(index)))
        except (OSError, ValueError, RuntimeError, KeyError) as error:
            raise FileFormatError(
                f"Array '{self.name}' of the part in '{self.folder.name}' cannot be read "
                f"({error}); make the store again."
            ) from error
        return block.T

    def _read(self, index: tuple[slice, ...]) -> NDArray[Any]:
        if self.kind == "maps":
            return np.array(self.open()[index], order="C")
        import zarr

        # One chunk at a time: each thread that decodes keeps memory of its own.
        with zarr.config.set({"async.concurrency": 1}):
            return np.ascontiguousarray(self.open()[index])

    def check(self) -> None:
        """Raise `FileFormatError` if the array's shape or type is not what the head says."""
        try:
            found = self.open()
            shape, dtype = tuple(found.shape), found.dtype
            whole = self.kind == "zarr" or bool(found.flags.c_contiguous)
            chunk = math.prod(found.chunks) if self.kind == "zarr" else 0
        except (OSError, ValueError, KeyError, TypeError) as error:
            raise FileFormatError(
                f"Array '{self.name}' in '{self.folder.name}' cannot be opened: {error}"
            ) from error
        if shape != self.shape[::-1] or dtype != ARRAYS[self.name] or not whole or chunk > 1 << 26:
            raise FileFormatError(
                f"Array '{self.name}' in '{self.folder.name}' has shape {shape} and type {dtype}; "
                f"the head asks for {self.shape[::-1]} and {np.dtype(ARRAYS[self.name])}."
            )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StoredPart:
    """A part whose arrays stay on the disk; what the slicer needs of a `Part`.

    Attributes
    ----------
    grid : VoxelGrid
    resins : tuple of Material
    palette : tuple of Blend
    labels, distance, occupancy : StoredArray or None
        As those of `voxelmat.model.part.Part`; ``labels[i0:i1, j0:j1, k0:k1]`` reads a block.
    name : str
    digest : str
        SHA-256 over head and slab digests; not that of the same part in memory.
    folder : Path
    slab : int
        Planes along z that belong together on the disk.
    """

    grid: VoxelGrid
    resins: tuple[Material, ...]
    palette: tuple[Blend, ...]
    labels: StoredArray
    distance: StoredArray | None = None
    occupancy: StoredArray | None = None
    name: str = "part"
    digest: str
    folder: Path
    slab: int
    _head: Part = field(init=False, repr=False)

    def __post_init__(self) -> None:
        one = VoxelGrid(shape=(1, 1, 1), spacing=self.grid.spacing)
        head = Part(
            grid=one,
            resins=self.resins,
            palette=self.palette,
            labels=np.zeros((1, 1, 1), np.uint16),
        )
        object.__setattr__(self, "_head", head)

    def palette_fractions(self) -> NDArray[np.float64]:
        """Volume fractions, shape (palette, resins); row 0 is all zero."""
        return self._head.palette_fractions()

    def printed_labels(self) -> NDArray[np.bool_]:
        """For each palette entry: is it laid by the printer (not empty, not bought-in)?"""
        return self._head.printed_labels()

    def resin(self, name: str) -> Material:
        """The resin of that name; `InputError` where there is none."""
        return self._head.resin(name)

    def load(self, law: BlendLaw | None = None) -> Part:
        """The whole part in memory."""
        whole = (slice(None),) * 3
        return Part(
            grid=self.grid,
            resins=self.resins,
            palette=self.palette,
            labels=self.labels[whole],
            distance=None if self.distance is None else self.distance[whole],
            occupancy=None if self.occupancy is None else self.occupancy[whole],
            law=LogMix() if law is None else law,
            name=self.name,
        )


#: What can be sliced.
AnyPart = Part | StoredPart


def z_slabs(part: AnyPart, most_voxels: int = 4 << 20) -> Iterator[tuple[int, int]]:
    """First and last plane of slabs along z of at most so many voxels, or as they are stored."""
    nx, ny, nz = part.grid.shape
    step = max(1, most_voxels // (nx * ny))
    if isinstance(part, StoredPart):
        step = max(step // part.slab, 1) * part.slab
    for first in range(0, nz, step):
        yield first, min(first + step, nz)


def slab_digest(block: NDArray[Any]) -> str:
    """SHA-256 of a block ``[i, j, k]``, x fastest."""
    return hashlib.sha256(np.ascontiguousarray(block.T).data).hexdigest()


def head_digest(head: Mapping[str, Any]) -> str:
    """SHA-256 over all that decides what is printed; name, kind and source are left out."""
    kept = ("format", "format_number", "grid", "palette", "resins", "slab", "arrays")
    return text_digest({key: head[key] for key in kept})


def open_big_part(folder: str | Path, *, verify: bool = True) -> StoredPart:
    """Open a stored part and check it.

    Parameters
    ----------
    folder : str or Path
    verify : bool
        Read every slab and compare its SHA-256; else only the head, shapes and types are
        checked (and Zarr checks each chunk's checksum when it is read).

    Raises
    ------
    FileFormatError
        Where it is not a finished store, was changed, or is damaged.
    """
    folder = Path(folder).absolute()
    head = _read_head(folder)
    try:
        grid = VoxelGrid(
            shape=tuple(head["grid"]["shape"]),
            spacing=tuple(head["grid"]["spacing_mm"]),
            origin=tuple(head["grid"]["origin_mm"]),
        )
        if head["kind"] not in KINDS or not set(head["arrays"]) <= set(ARRAYS):
            raise FileFormatError(f"kind {head['kind']!r} or an array is not known")
        count = -(-grid.shape[2] // int(head["slab"]))
        if any(len(d) != count for d in head["arrays"].values()):
            raise FileFormatError(f"an array does not have {count} slabs")
        arrays = {n: StoredArray(folder, n, head["kind"], grid.shape) for n in head["arrays"]}
        part = StoredPart(
            grid=grid,
            resins=tuple(material_of(m) for m in head["resins"]),
            palette=tuple(Blend(tuple((n, f) for n, f in b)) for b in head["palette"]),
            name=head["name"],
            digest=head["digest"],
            folder=folder,
            slab=int(head["slab"]),
            **arrays,
        )
        if head_digest(head) != head["digest"]:
            raise FileFormatError("its digest does not agree")
    except (
        VoxelmatError,
        LookupError,
        TypeError,
        ValueError,
        ArithmeticError,
        AttributeError,
    ) as error:
        raise FileFormatError(
            f"{HEAD} in '{folder.name}' is not the head of a stored part: {error}"
        ) from error
    for array in arrays.values():
        array.check()
    if verify:
        _verify(part, head["arrays"])
    return part


def _read_head(folder: Path) -> dict[str, Any]:
    path = folder / HEAD
    try:
        if path.stat().st_size > _LARGEST_HEAD:
            raise FileFormatError(f"{HEAD} in '{folder.name}' is larger than any head can be.")
        head = json.loads(path.read_text("utf-8"))
    except FileNotFoundError:
        raise FileFormatError(
            f"'{folder.name}' is not a finished part store: it has no {HEAD}."
        ) from None
    except (OSError, ValueError, RecursionError) as error:
        raise FileFormatError(f"{HEAD} in '{folder.name}' cannot be read: {error}") from None
    if not isinstance(head, dict) or head.get("format") != FORMAT or head.get("format_number") != 1:
        raise FileFormatError(f"{HEAD} in '{folder.name}' is not a part store of format 1.")
    return head


def _verify(part: StoredPart, digests: Mapping[str, list[str]]) -> None:
    """Compare every slab with its digest."""
    for name, wanted in digests.items():
        array = getattr(part, name)
        for n, digest in enumerate(wanted):
            planes = slice(n * part.slab, min((n + 1) * part.slab, part.grid.shape[2]))
            if slab_digest(array[:, :, planes]) != digest:
                raise FileFormatError(
                    f"Array '{name}' in '{part.folder.name}' was changed or is damaged at planes "
                    f"{planes.start} to {planes.stop - 1} along z; make the store again."
                )


def require_kind(kind: str) -> None:
    """Raise `InputError` for a kind of store that is not known or lacks its library."""
    if kind not in KINDS:
        raise InputError(f"A part store is one of {', '.join(KINDS)}; got {kind!r}.")
    if kind == "zarr":
        try:
            import zarr  # noqa: F401
        except ImportError:
            raise InputError(
                "A chunked store needs the package 'zarr'; install voxelmat[scale], or use "
                "kind='maps'."
            ) from None

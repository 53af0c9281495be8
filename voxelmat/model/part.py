"""A part: a grid with a label at every voxel and a palette of blends that labels point at."""

from __future__ import annotations

import dataclasses
import hashlib
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.laws import BlendLaw, LogMix
from voxelmat.model.material import Material
from voxelmat.provenance import text_digest

__all__ = ["DISTANCE_STEPS", "SOLID_FROM", "Part"]

#: Signed distance is kept in 1/16 of the smallest spacing.
DISTANCE_STEPS = 16
#: Least occupancy (of 255) with which a voxel takes part in a solve. A feather of a voxel has next
#: to no stiffness, so that a load on it would read as a large displacement of the part. The limit
#: of one tenth is ours.
SOLID_FROM = 26


def _owned(array: object, dtype: type, shape: tuple[int, int, int], name: str) -> NDArray[Any]:
    """A read-only, x-fastest copy (or the array itself where it already is one)."""
    given = np.asarray(array)
    if given.shape != shape:
        raise InputError(f"{name} has shape {given.shape}; the grid has {shape}.")
    if given.dtype != dtype:
        if given.dtype.kind not in "iub":
            raise InputError(f"{name} holds {given.dtype} values; give whole numbers.")
        limits = np.iinfo(dtype)
        if given.size and (int(given.min()) < limits.min or int(given.max()) > limits.max):
            raise InputError(
                f"{name} goes from {given.min()} to {given.max()}; it must lie in "
                f"{limits.min} to {limits.max}."
            )
    if given.dtype == dtype and given.flags.f_contiguous and not given.flags.writeable:
        return given
    out: NDArray[Any] = np.array(given, dtype=dtype, order="F", copy=True)
    out.flags.writeable = False
    return out


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Part:
    """Material at every voxel.

    Attributes
    ----------
    grid : VoxelGrid
    resins : tuple of Material
        Every material that a blend of the palette names; unused ones may be there too.
    palette : tuple of Blend
        What labels point at; entry 0 is empty space.
    labels : ndarray of uint16, shape ``grid.shape``
        Indexed ``[i, j, k]``, x fastest in memory, read-only.
    distance : ndarray of int8 or None
        Signed distance of the outline *as it is to be printed* (bought-in bodies and their
        clearance cut away), negative inside, in 1/16 of the smallest spacing, at voxel
        centres, clipped to +-127.
    occupancy : ndarray of uint8 or None
        Solid fraction of each voxel, 255 for full; None means every labelled voxel is full.
    bodies : mapping
        Body name to bool array of the voxels that it owns.
    law : BlendLaw
        From fractions to moduli.
    name : str
    """

    grid: VoxelGrid
    resins: tuple[Material, ...]
    palette: tuple[Blend, ...]
    labels: NDArray[np.uint16]
    distance: NDArray[np.int8] | None = None
    occupancy: NDArray[np.uint8] | None = None
    bodies: Mapping[str, NDArray[np.bool_]] = field(default_factory=dict)
    law: BlendLaw = field(default_factory=LogMix)
    name: str = "part"

    def __post_init__(self) -> None:
        shape = self.grid.shape
        put = object.__setattr__
        put(self, "resins", tuple(self.resins))
        put(self, "palette", tuple(self.palette))
        put(self, "labels", _owned(self.labels, np.uint16, shape, "labels"))
        if self.distance is not None:
            put(self, "distance", _owned(self.distance, np.int8, shape, "distance"))
        if self.occupancy is not None:
            put(self, "occupancy", _owned(self.occupancy, np.uint8, shape, "occupancy"))
        self._check()

    def _check(self) -> None:
        if not self.palette or not self.palette[0].is_empty:
            raise InputError("Entry 0 of a palette is empty space (voxelmat.model.blend.EMPTY).")
        if any(b.is_empty for b in self.palette[1:]) or len(self.palette) > 65536:
            raise InputError(
                "Only entry 0 of a palette may be empty; it has at most 65536 entries."
            )
        names = [m.name for m in self.resins]
        if len(set(names)) != len(names):
            raise InputError(f"Each resin is given once; got {names}.")
        for blend in self.palette:
            for resin, _ in blend.fractions:
                if resin not in names:
                    raise InputError(
                        f"The palette names resin '{resin}', which is not among the part's "
                        f"resins: {', '.join(names) or 'none'}."
                    )
        top = int(self.labels.max(initial=0))
        if top >= len(self.palette):
            raise InputError(
                f"Label {top} points past the palette, which has {len(self.palette)} entries."
            )
        if self.occupancy is not None and bool(np.any((self.occupancy > 0) & (self.labels == 0))):
            raise InputError("Some voxels have an occupancy above 0 but no label.")
        for body, mask in self.bodies.items():
            if mask.shape != self.grid.shape:
                raise InputError(f"Body '{body}' has a mask of shape {mask.shape}.")

    # ------------------------------------------------------------------ what it is made of
    @property
    def solid(self) -> NDArray[np.bool_]:
        """Voxels that hold enough material to be solved, ``[i, j, k]``; see `SOLID_FROM`."""
        if self.occupancy is not None:
            return (self.labels > 0) & (self.occupancy >= SOLID_FROM)
        return self.labels > 0

    @property
    def fill(self) -> NDArray[np.float32]:
        """Solid fraction of each voxel that is solved, 0 to 1; 0 in the others."""
        if self.occupancy is None:
            return np.asarray(self.labels > 0, dtype=np.float32)
        return np.divide(np.where(self.solid, self.occupancy, 0), 255, dtype=np.float32)

    @property
    def outline(self) -> str:
        """How the slicer will draw the outline of this part, in words."""
        if self.distance is not None:
            return "true signed distance of the shape"
        if self.occupancy is not None:
            return "solid fraction of the voxels: this part came without a signed distance"
        return "nearest voxel: this part came without a signed distance, so edges show steps"

    def resin(self, name: str) -> Material:
        """The resin of that name; `InputError` where there is none."""
        for material in self.resins:
            if material.name == name:
                return material
        raise InputError(f"The part has no resin '{name}'; it has {[m.name for m in self.resins]}.")

    def palette_fractions(self) -> NDArray[np.float64]:
        """Volume fractions, shape (palette, resins); row 0 is all zero."""
        table = np.zeros((len(self.palette), len(self.resins)))
        column = {m.name: c for c, m in enumerate(self.resins)}
        for row, blend in enumerate(self.palette):
            for resin, fraction in blend.fractions:
                table[row, column[resin]] = fraction
        return table

    def palette_moduli(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Bulk and shear modulus of each palette entry, MPa; 0 for empty space."""
        bulk, shear = np.zeros(len(self.palette)), np.zeros(len(self.palette))
        if len(self.palette) > 1:
            value = self.law.evaluate(
                self.palette_fractions()[1:],
                np.array([m.bulk for m in self.resins]),
                np.array([m.shear for m in self.resins]),
                resins=[m.name for m in self.resins],
            )
            bulk[1:], shear[1:] = value.bulk, value.shear
        return bulk, shear

    def palette_lame(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Lame constants lambda = K - 2 G / 3 and mu = G of each palette entry, MPa."""
        bulk, shear = self.palette_moduli()
        return bulk - 2.0 * shear / 3.0, shear

    def palette_density(self) -> NDArray[np.float64]:
        """Density of each palette entry by volume fractions, tonne/mm^3."""
        density = np.array([m.density.value for m in self.resins])
        return np.asarray(self.palette_fractions() @ density)

    def printed_labels(self) -> NDArray[np.bool_]:
        """For each palette entry: is it laid by the printer (not empty, not bought-in)?"""
        bought = {m.name for m in self.resins if m.kind == "bought-in"}
        return np.array(
            [not b.is_empty and not any(n in bought for n, _ in b.fractions) for b in self.palette]
        )

    # ------------------------------------------------------------------ amounts
    def filled(self) -> NDArray[np.float64]:
        """Filled voxels (fractions counted) of each palette entry."""
        weight = None if self.occupancy is None else self.occupancy.ravel(order="F") / 255.0
        count = np.bincount(
            self.labels.ravel(order="F"), weights=weight, minlength=len(self.palette)
        ).astype(np.float64)
        count[0] = 0.0
        return count

    def volumes(self) -> dict[str, float]:
        """Volume of each resin that occurs, mm^3."""
        amount = self.filled() @ self.palette_fractions() * self.grid.voxel_volume
        return {m.name: float(v) for m, v in zip(self.resins, amount, strict=True) if v > 0}

    def masses(self) -> dict[str, float]:
        """Mass of each resin that occurs, tonne."""
        return {n: v * self.resin(n).density.value for n, v in self.volumes().items()}

    @property
    def mass(self) -> float:
        """Mass of everything, tonne."""
        return sum(self.masses().values())

    # ------------------------------------------------------------------ identity
    @property
    def digest(self) -> str:
        """SHA-256 over grid, palette, resins, law and arrays (the name is left out)."""
        head = {
            "grid": self.grid.as_dict(),
            "palette": [list(b.fractions) for b in self.palette],
            "resins": [m.as_dict() for m in self.resins],
            "law": repr(self.law),
        }
        code = hashlib.sha256(text_digest(head).encode())
        for array in (self.labels, self.distance, self.occupancy):
            code.update(b"|" if array is None else np.ascontiguousarray(array.T).data)
        return code.hexdigest()

    def __eq__(self, other: object) -> bool:
        return isinstance(other, Part) and self.digest == other.digest

    def __hash__(self) -> int:
        return hash(self.digest)

    def replace(self, **changes: Any) -> Part:
        """A copy with `changes`, validated again."""
        return dataclasses.replace(self, **changes)

    @classmethod
    def uniform(cls, grid: VoxelGrid, resin: Material, *, name: str = "part") -> Part:
        """A full block of one resin."""
        labels = np.ones(grid.shape, dtype=np.uint16, order="F")
        palette = (EMPTY, Blend.pure(resin.name))
        return cls(grid=grid, resins=(resin,), palette=palette, labels=labels, name=name)

    def __repr__(self) -> str:
        n, h = self.grid.shape, self.grid.spacing
        return (
            f"Part({self.name!r}, {n[0]} x {n[1]} x {n[2]} voxels of {h[0]:g} x {h[1]:g} x "
            f"{h[2]:g} mm, {len(self.palette) - 1} blends of {len(self.resins)} resins)"
        )

    def _repr_html_(self) -> str:
        from voxelmat.model.html import part_table

        return part_table(self)

"""A volume as open formats hold it: a number at every voxel, and what the numbers stand for."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.laws import BlendLaw, LogMix
from voxelmat.model.material import Material
from voxelmat.model.part import Part

__all__ = ["HALF_FULL", "Volume"]

#: Occupancy (of 255) from which a voxel is kept where a format has no place for partly full ones.
HALF_FULL = 128
_LARGEST_LABEL = 65535
_EXACT = 1 << 24  # whole numbers up to here are exact in float32


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Volume:
    """What a volume file holds.

    Attributes
    ----------
    grid : VoxelGrid
    values : ndarray, shape ``grid.shape``
        Indexed ``[i, j, k]``, x fastest: uint16 labels (0 is empty) or float32 grey values
        (real numbers, or whole ones that are no labels: below 0 or above 65535).
    names : mapping of int to str
        What a label is called, where the file says so.
    blends : mapping of int to Blend
        What a label is made of, where the file says so (files that voxelmat wrote do).
    resins : tuple of Material
        The resins of these blends, where the file says so.
    occupancy : ndarray of uint8 or None
        Solid fraction of each voxel, 255 is full.
    distance : ndarray of int8 or None
        Signed distance as in `Part`.
    name, source : str
        Of the part; of the file that it came from.
    notes : tuple of str
        What was odd about the file.
    """

    grid: VoxelGrid
    values: NDArray[Any]
    names: Mapping[int, str] = field(default_factory=dict)
    blends: Mapping[int, Blend] = field(default_factory=dict)
    resins: tuple[Material, ...] = ()
    occupancy: NDArray[np.uint8] | None = None
    distance: NDArray[np.int8] | None = None
    name: str = "volume"
    source: str = ""
    notes: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        values = np.asarray(self.values)
        if values.shape != self.grid.shape:
            raise InputError(
                f"The values have shape {values.shape}; the grid has {self.grid.shape}.",
                file=self.source or None,
            )
        object.__setattr__(self, "values", np.asfortranarray(_kept(values, self.source)))

    def __repr__(self) -> str:
        n, h = self.grid.shape, self.grid.spacing
        kind = f"{len(self.present())} labels" if self.is_labels else "grey values"
        return (
            f"Volume({self.name!r}, {n[0]} x {n[1]} x {n[2]} voxels of {h[0]:g} x {h[1]:g} x "
            f"{h[2]:g} mm, {kind})"
        )

    @property
    def is_labels(self) -> bool:
        """True for whole-numbered labels, False for grey values."""
        return bool(self.values.dtype == np.uint16)

    def present(self) -> list[int]:
        """The labels above 0 that occur, ascending."""
        self._labels_only()
        counts = np.bincount(self.values.ravel(order="K"), minlength=1)
        return [int(n) for n in np.flatnonzero(counts) if n]

    def _labels_only(self) -> None:
        if not self.is_labels:
            raise InputError(
                "The file holds grey values, not labels; give thresholds to make a mask of them.",
                file=self.source or None,
            )

    def mask(self, low: float = -math.inf, high: float = math.inf) -> NDArray[np.bool_]:
        """Voxels whose value lies in ``low <= value <= high``, ``[i, j, k]``; nan never does.

        Raises
        ------
        InputError
            Where the thresholds are nan or the wrong way round.
        """
        if not low <= high:
            raise InputError(f"Thresholds need low <= high; got {low} and {high}.")
        return np.asarray((self.values >= low) & (self.values <= high), order="F")

    def thresholded(self, low: float = -math.inf, high: float = math.inf) -> Volume:
        """Label 1 where the value lies in ``low <= value <= high``, 0 elsewhere; see `mask`."""
        return Volume(
            grid=self.grid,
            values=self.mask(low, high).astype(np.uint16),
            names={1: f"{low:g} to {high:g}"},
            name=self.name,
            source=self.source,
            notes=self.notes,
        )

    def crisp(self) -> Volume:
        """Without partly full voxels: those at least half full stay, the others are emptied."""
        if self.occupancy is None and self.distance is None:
            return self
        full = self.values > 0
        if self.occupancy is not None:
            full &= self.occupancy >= HALF_FULL
        return Volume(
            grid=self.grid,
            values=np.where(full, self.values, 0).astype(np.uint16),
            names=self.names,
            blends=self.blends,
            resins=self.resins,
            name=self.name,
            source=self.source,
            notes=self.notes,
        )

    @classmethod
    def from_part(cls, part: Part) -> Volume:
        """The part's labels with the names and blends of its palette."""
        return cls(
            grid=part.grid,
            values=part.labels,
            names={n: str(b) for n, b in enumerate(part.palette) if n},
            blends={n: b for n, b in enumerate(part.palette) if n},
            resins=part.resins,
            occupancy=part.occupancy,
            distance=part.distance,
            name=part.name,
        )

    def to_part(
        self,
        labels: Mapping[int, Blend | str | None] | None = None,
        resins: Iterable[Material] | None = None,
        law: BlendLaw | None = None,
        name: str | None = None,
    ) -> Part:
        """A part of the volume's labels.

        Parameters
        ----------
        labels : mapping, optional
            Label to a blend, to the name of a resin, or to None for empty space. Every label
            above 0 that occurs must be there. Left out: what the file says.
        resins : iterable of Material, optional
            Left out: what the file says.
        law : BlendLaw, optional
            `LogMix` where left out.
        name : str, optional

        Raises
        ------
        InputError
            For grey values, labels or resins that nothing is said about.
        """
        self._labels_only()
        mapping = self.blends if labels is None else labels
        stock = tuple(self.resins if resins is None else resins)
        present = self.present()
        unknown = [n for n in present if n not in mapping]
        if unknown:
            called = ", ".join(
                f"{n} ('{self.names[n]}')" if n in self.names else str(n) for n in unknown[:10]
            )
            raise InputError(
                f"Nothing says what label {called} is made of"
                f"{' and others' if len(unknown) > 10 else ''}; map each label to a blend, a resin "
                "or empty space.",
                file=self.source or None,
                key="labels",
            )
        palette: list[Blend] = [EMPTY]
        place = np.zeros(_LARGEST_LABEL + 1, dtype=np.uint16)
        for label in sorted(n for n in mapping if n):
            said = mapping[label]
            blend = EMPTY if said is None else Blend.pure(said) if isinstance(said, str) else said
            if blend.is_empty or not 0 < label <= _LARGEST_LABEL:
                continue
            place[label] = len(palette)
            palette.append(blend)
        new = place[self.values]
        occupancy = self.occupancy
        if occupancy is not None:
            occupancy = np.where(new > 0, occupancy, 0).astype(np.uint8)
        emptied = any(not place[n] for n in present)
        return Part(
            grid=self.grid,
            resins=stock,
            palette=tuple(palette),
            labels=new,
            occupancy=occupancy,
            # The distance is that of everything; it would lie where a label was emptied.
            distance=None if emptied else self.distance,
            law=LogMix() if law is None else law,
            name=name or self.name,
        )


def _kept(values: NDArray[Any], source: str) -> NDArray[Any]:
    """Whole numbers from 0 to 65535 as uint16 labels, others as float32 grey values."""
    if values.dtype.kind == "f":
        return values.astype(np.float32, copy=False)
    if values.dtype.kind not in "iub":
        raise InputError(
            f"The values are of type {values.dtype}; whole or real numbers are read.",
            file=source or None,
        )
    low, high = (int(values.min()), int(values.max())) if values.size else (0, 0)
    if low >= 0 and high <= _LARGEST_LABEL:
        return values.astype(np.uint16, copy=False)
    if max(-low, high) > _EXACT:
        raise InputError(
            f"Whole numbers go from {low} to {high}: too large for labels (0 to {_LARGEST_LABEL}) "
            f"and for grey values (up to {_EXACT}).",
            file=source or None,
        )
    return values.astype(np.float32)

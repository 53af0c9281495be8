"""One design on the way of an optimisation, to look at or to take."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from voxelmat.model.design_result import IterationRecord
from voxelmat.model.part import Part
from voxelmat.monitor import computing

__all__ = ["Iterate"]


class Iterate:
    """The design of one iteration; kept small until it is asked for as a part.

    Parameters
    ----------
    record : IterationRecord
        Its figures.
    unknowns : ndarray
        Kept as float32: enough to draw and to print it, not to go on from.
    make : callable
        ``make(unknowns, sharpness)`` gives the part.
    """

    def __init__(
        self,
        record: IterationRecord,
        unknowns: NDArray[np.float64],
        make: Callable[[NDArray[np.float64], float], Part],
    ) -> None:
        self.record = record
        self._unknowns = unknowns.astype(np.float32)
        self._make = make

    @property
    def n_bytes(self) -> int:
        """Memory that it takes."""
        return int(self._unknowns.nbytes)

    def part(self) -> Part:
        """The part of this design; safe to call from another thread than the optimiser's."""
        with computing():
            return self._make(self._unknowns.astype(np.float64), self.record.sharpness)

    def __repr__(self) -> str:
        return f"Iterate({self.record.iteration}, objective {self.record.objective:.4g})"

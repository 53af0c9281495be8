"""What an optimiser hands back: a part, how it got there, and why it stopped."""

from __future__ import annotations

import html
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from voxelmat.model.design_stages import Price, StagedValue
from voxelmat.model.part import Part
from voxelmat.provenance import Provenance
from voxelmat.units import number

__all__ = ["ConstraintValue", "DesignResult", "IterationRecord"]


@dataclass(frozen=True, slots=True, kw_only=True)
class IterationRecord:
    """The figures of one iteration.

    Attributes
    ----------
    iteration : int
        From 1.
    objective : float
        In the unit of `DesignResult.objective_unit`, of the design that the iteration began with.
    violation : float
        Largest constraint value over its limit, minus 1; not above 0 when all are met.
    gap : float
        Bound on what the linearised problem could still win, relative; nan where not computed.
    grey : float
        Mean of 4 rho (1 - rho): 0 for empty-or-solid, 1 for half everywhere.
    change : float
        Mean change of the unknowns, blends weighted by how solid their voxel is.
    sharpness : float
        Of the projection.
    cg_iterations : int
        All solves of the iteration together.
    """

    iteration: int
    objective: float
    violation: float
    gap: float
    grey: float
    change: float
    sharpness: float
    cg_iterations: int


@dataclass(frozen=True, slots=True, kw_only=True)
class ConstraintValue:
    """A limited quantity: what it is, what was reached, what was allowed.

    Attributes
    ----------
    name : str
    value, limit : float
    unit : str
    at_least : bool
        Whether the limit is a lower one.
    scale : float or None
        What a violation is measured by; the size of the limit where left out.
    """

    name: str
    value: float
    limit: float
    unit: str
    at_least: bool = False
    scale: float | None = None

    @property
    def met(self) -> bool:
        """Within a thousandth of the scale."""
        over = self.limit - self.value if self.at_least else self.value - self.limit
        return over <= 1e-3 * (abs(self.limit) if self.scale is None else self.scale) * (1 + 1e-9)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class DesignResult:
    """An optimised part.

    Attributes
    ----------
    part : Part
        Palette, labels, signed distance and occupancy of the design.
    history : tuple of IterationRecord
    reason : str
        Why it stopped, in words with numbers.
    converged : bool
        False where the iterations ran out or the user stopped it.
    cancelled : bool
    objective : float
        Of the design as optimised, solved to 1e-6.
    objective_name, objective_unit : str
    objective_of_palette : float
        The same with every blend replaced by its palette entry.
    palette_error : float
        Largest difference of a volume fraction between design and palette.
    constraints : tuple of ConstraintValue
    density : ndarray of float32, shape ``grid.shape``
        How solid each voxel is before the outline was drawn, 0 to 1.
    fractions : ndarray of float32, shape (resins, ...) over ``grid.shape``
        Volume fractions over `DesignSpec.resins`; kept voxels hold zeros.
    notes : tuple of str
        What was frozen or adapted without being asked for, and what rounding changed much.
    stages : tuple of StagedValue
        The objective and every limit: as optimised, and of the part that was made.
    prices : tuple of Price
        Of the limits that hold the objective back, dearest first.
    unknowns : ndarray or None
        Of the last whole design; what a run of a similar question can start from.
    provenance : Provenance
    """

    part: Part
    history: tuple[IterationRecord, ...]
    reason: str
    converged: bool
    cancelled: bool
    objective: float
    objective_name: str
    objective_unit: str
    objective_of_palette: float
    palette_error: float
    constraints: tuple[ConstraintValue, ...]
    density: NDArray[np.float32]
    fractions: NDArray[np.float32]
    notes: tuple[str, ...] = ()
    stages: tuple[StagedValue, ...] = ()
    prices: tuple[Price, ...] = ()
    unknowns: NDArray[np.float64] | None = None
    provenance: Provenance = field(default_factory=Provenance)

    @property
    def iterations(self) -> int:
        """Iterations done."""
        return len(self.history)

    @property
    def feasible(self) -> bool:
        """Whether every limit is met."""
        return all(c.met for c in self.constraints)

    def __repr__(self) -> str:
        return (
            f"DesignResult({self.objective_name} {number(self.objective, 4)} "
            f"{self.objective_unit}, {self.iterations} iterations, {self.reason})"
        )

    def _repr_html_(self) -> str:
        rows = [
            (self.objective_name, f"{number(self.objective, 4)} {self.objective_unit}"),
            ("with palette blends", f"{number(self.objective_of_palette, 4)} "
             f"{self.objective_unit}"),
            *(
                (c.name, f"{number(c.value, 4)} of {number(c.limit, 4)} {c.unit}"
                 + ("" if c.met else " (not met)"))
                for c in self.constraints
            ),
            ("iterations", str(self.iterations)),
            ("stopped because", self.reason),
            *(("note", n) for n in self.notes),
        ]  # fmt: skip
        body = "".join(
            f"<tr><th style='text-align:left'>{html.escape(k)}</th>"
            f"<td style='text-align:left'>{html.escape(v)}</td></tr>"
            for k, v in rows
        )
        return f"<table>{body}</table>"

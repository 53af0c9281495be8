"""What a measure is turned into a response with: the part, its load cases and its unknowns."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.material import Constant
from voxelmat.model.part import Part
from voxelmat.model.region import solid_nodes
from voxelmat.topopt.physics import Case
from voxelmat.topopt.unknowns import Unknowns

__all__ = ["Setting", "case_number", "check_nodes"]

Bools = NDArray[np.bool_]

# Voxels filled less than this by the shape are not judged: their values say little.
_JUDGED = 0.5


@dataclass(frozen=True, slots=True, kw_only=True)
class Setting:
    """Everything a measure may need to know.

    Attributes
    ----------
    part : Part
    cases : tuple of Case
    unknowns : Unknowns
    key : str
        Tells this measure from the others of the problem.
    """

    part: Part
    cases: tuple[Case, ...]
    unknowns: Unknowns
    key: str

    def case(self, name: str | None, what: str) -> int:
        """Number of a load case by its name; the only one where left out."""
        return case_number(self.cases, name, what)

    def numbers(self, names: tuple[str, ...], what: str) -> tuple[int, ...]:
        """Numbers of load cases by their names; all where left out."""
        if not names:
            return tuple(range(len(self.cases)))
        return tuple(sorted({self.case(name, what) for name in names}))

    def region(self, mask: Bools | None, what: str) -> Bools:
        """Designed voxels in a region, (nz, ny, nx).

        Raises
        ------
        InputError
            Another shape than the grid's, or no designed voxel.
        """
        domain = self.unknowns.choice.domain
        if mask is None:
            return domain
        inside = self.voxels(mask, what) & domain
        if not inside.any():
            raise InputError(f"The region of the {what} holds no voxel that is designed.")
        return inside

    def judged(self, mask: Bools | None, what: str) -> Bools:
        """Solid voxels in a region, filled at least by half, (nz, ny, nx)."""
        inside = np.ascontiguousarray((self.part.solid & (self.part.fill >= _JUDGED)).T)
        if mask is not None:
            inside &= self.voxels(mask, what)
        if not inside.any():
            raise InputError(
                f"The region of the {what} holds no voxel that is at least half filled."
            )
        return inside

    def voxels(self, mask: Bools, what: str) -> Bools:
        """A public mask ``[i, j, k]`` as (nz, ny, nx)."""
        if mask.shape != self.part.grid.shape:
            raise InputError(
                f"The region of the {what} has shape {mask.shape}; the grid has "
                f"{self.part.grid.shape}."
            )
        return np.ascontiguousarray(mask.T)

    def constant(self, resin: str, field: str, what: str) -> Constant:
        """A constant of a resin's record that a measure cannot do without."""
        found: Constant | None = getattr(self.part.resin(resin), field)
        if found is None:
            raise InputError(
                f"The {what} needs the {field} of '{resin}', which its record does not hold; add "
                "it, or name the resins to judge."
            )
        return found


def case_number(cases: tuple[Case, ...], name: str | None, what: str) -> int:
    """Number of a load case by its name; the only one where left out."""
    names = [c.name for c in cases]
    if name is None and len(cases) > 1:
        raise InputError(f"The {what} must name its load case; there are {', '.join(names)}.")
    if name is not None and name not in names:
        raise InputError(
            f"The {what} names load case '{name}'; there are {', '.join(names)}."
        )  # fmt: skip
    return 0 if name is None else names.index(name)


def check_nodes(part: Part, nodes: Bools, what: str) -> None:
    """Refuse nodes ``[i, j, k]`` of another grid, or that touch no material."""
    if nodes.shape != part.grid.node_shape:
        raise InputError(
            f"The {what} has nodes of shape {nodes.shape}; the grid has {part.grid.node_shape}."
        )
    off = int((nodes & ~solid_nodes(part.solid)).sum())
    if off:
        raise InputError(
            f"{off} of {int(nodes.sum())} nodes of the {what} touch no material; choose nodes of "
            "the part's surface."
        )

"""Whether solid material hangs together with what holds the part, by a virtual temperature.

The share that makes heat is rho, and held nodes are cold: see `voxelmat.topopt.virtual_heat`. A
floating piece is hot. The response is over the norm of the shape when it is all solid, so that it
has no unit and changes little with the size of the shape or the grid.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import scipy.ndimage
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.heatresult import corner_mean
from voxelmat.model.measure_physics import ConnectedSolid
from voxelmat.model.part import Part
from voxelmat.model.region import solid_nodes
from voxelmat.topopt.physics import Case, Physics
from voxelmat.topopt.unknowns import Unknowns
from voxelmat.topopt.virtual_heat import VirtualHeat, filled

__all__ = ["ConnectedResponse", "connected_response"]

Array = NDArray[np.float64]
Bools = NDArray[np.bool_]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ConnectedResponse:
    """p-norm of the virtual temperature of solid voxels, over that of the solid shape.

    Attributes
    ----------
    heat : VirtualHeat
        Cold at held nodes.
    designed : ndarray of bool, shape (nz, ny, nx)
        The other voxels of the shape count as solid.
    solid_norm : float
        p-norm of the solid shape, mm^2.
    """

    heat: VirtualHeat
    designed: Bools
    solid_norm: float
    name: str = "connected solid"
    unit: str = ""

    def value(self, physics: Physics) -> tuple[float, dict[str, Array]]:
        """Value, and derivative by ``rho``."""
        kept = (self.heat.fill > 0.0).astype(np.float64)
        share = np.where(self.designed, physics.fields.rho, kept)
        norm, by_share = self.heat.norm(share, physics)
        by_rho = np.where(self.designed, by_share, 0.0)
        return norm / self.solid_norm, {"rho": by_rho / self.solid_norm}

    def report(self, value: float) -> float:
        """As it is."""
        return value


def _held_nodes(part: Part, measure: ConnectedSolid, cases: Sequence[Case]) -> Bools:
    """Nodes of material at which anything holds the part, [k, j, i]."""
    held = np.zeros(part.grid.node_shape[::-1], dtype=bool)
    for holds in (*measure.supports, *measure.springs):
        held |= holds.region.nodes(part).T
    if not (measure.supports or measure.springs):
        for case in cases:
            held |= case.fixed.any(axis=0)
            if case.springs is not None:
                held |= (case.springs > 0).any(axis=0)
    held &= solid_nodes(part.solid).T
    if not held.any():
        raise InputError(
            "A connected solid is asked about, but nothing holds the part, so there is nothing to "
            "be connected to; give supports, or a load case that has some."
        )
    return held


def _check_reach(part: Part, held: Bools) -> None:
    """Every piece of the shape must touch what is held, or its temperature has no bound."""
    solid = np.ascontiguousarray(part.solid.T)
    pieces, _ = scipy.ndimage.label(solid, np.ones((3, 3, 3)))
    reached = np.unique(pieces[solid & (corner_mean(held.astype(np.float64)) > 0.0)])
    loose = int((solid & ~np.isin(pieces, reached)).sum())
    if loose:
        raise InputError(
            f"A connected solid is asked about, but {loose} voxels of the shape itself are joined "
            "to nothing that is held. Take them out of the shape or hold them."
        )


def connected_response(
    measure: ConnectedSolid,
    part: Part,
    cases: Sequence[Case],
    unknowns: Unknowns,
    key: str = "",
) -> ConnectedResponse:
    """The response that a measure stands for.

    Raises
    ------
    InputError
        A design without empty voxels, nothing that is held or everything, a piece of the shape
        that is not held.
    """
    if unknowns.void is None:
        raise InputError(
            "A connected solid is asked about, but the design allows no empty voxels; set void to "
            "true or drop it."
        )
    held = _held_nodes(part, measure, cases)
    _check_reach(part, held)
    heat = VirtualHeat(
        fill=filled(part), cold=held, exponent=measure.exponent, key=f"connected {key}"
    )
    norm = heat.reference((heat.fill > 0.0).astype(np.float64), part.grid.spacing)
    if norm == 0.0:
        raise InputError(
            "Every voxel is held at all its corners, so nothing can be cut off; drop the measure "
            "of a connected solid or use a finer grid."
        )
    return ConnectedResponse(heat=heat, designed=unknowns.choice.domain, solid_norm=norm)
